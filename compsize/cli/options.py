"""Options that every command takes, so that one line of a script can carry them to any."""

from __future__ import annotations

import math
from collections.abc import Callable
from dataclasses import dataclass
from functools import wraps
from pathlib import Path
from typing import Any

import click

__all__ = ["Shared", "out_option", "shared_options", "study_argument"]


@dataclass(frozen=True)
class Shared:
    """The shared options as given; ``workers`` and ``time_limit`` [s] are None where they are not."""

    workers: int | None
    time_limit: float | None
    json: bool
    quiet: bool
    overwrite: bool


def _finite(_: click.Context, __: click.Parameter, value: float | None) -> float | None:
    if value is not None and not math.isfinite(value):
        raise click.BadParameter("a number of seconds is needed.")
    return value


_OPTIONS = (
    click.option("--workers", type=click.IntRange(min=1), metavar="N", help="Threads; without it, one per processor."),
    click.option(
        "--time-limit",
        type=click.FloatRange(min=0.0, min_open=True),
        callback=_finite,
        metavar="SECONDS",
        help="Stop a computation after so many seconds with what is known then.",
    ),
    click.option("--json", is_flag=True, help="Print the answer as JSON."),
    click.option("--quiet", is_flag=True, help="No progress and no notices on standard error."),
    click.option("--overwrite", is_flag=True, help="Replace an older result."),
)


def shared_options(function: Callable[..., int]) -> Callable[..., int]:
    """Adds the shared options to a command; it gets them as one :class:`Shared`, its last argument."""

    @wraps(function)
    def with_shared(
        *, workers: int | None, time_limit: float | None, json: bool, quiet: bool, overwrite: bool, **own: Any
    ) -> int:
        return function(**own, shared=Shared(workers, time_limit, json, quiet, overwrite))

    for option in reversed(_OPTIONS):
        option(with_shared)
    return with_shared


study_argument = click.argument("study", type=click.Path(path_type=Path))
"""The study folder, or its ``study.toml``; whether it is there is the reader's to say."""

out_option = click.option(
    "--out", required=True, type=click.Path(path_type=Path), metavar="DIR", help="Folder for the result."
)
