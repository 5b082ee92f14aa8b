"""Least-cost sizing and placing of shunt compensation, so that every listed outage keeps its margin, with proof.

::

    import compsize

    study = compsize.read_study("examples/harbour")
    result = compsize.size(study)
    compsize.write_report(result, "results/harbour")
    print(result.status, result.cost, result.to_frame())

The names are loaded when they are first used, so that importing the package costs nothing.
"""

from __future__ import annotations

from importlib import import_module
from typing import TYPE_CHECKING, Any

if TYPE_CHECKING:
    from compsize.api import margins, size
    from compsize.errors import CompsizeError, InputError, OutputError, UsageError
    from compsize.plan.records import MarginsResult, Plan, SizeResult
    from compsize.report.write import write_report
    from compsize.study.new import write_network
    from compsize.study.read_network import read_network
    from compsize.study.read_study import read_study
    from compsize.study.records import NetworkTables, Study

__all__ = [
    "CompsizeError",
    "InputError",
    "MarginsResult",
    "NetworkTables",
    "OutputError",
    "Plan",
    "SizeResult",
    "Study",
    "UsageError",
    "margins",
    "read_network",
    "read_study",
    "size",
    "write_network",
    "write_report",
]

_HOMES = {
    "compsize.api": ("margins", "size"),
    "compsize.errors": ("CompsizeError", "InputError", "OutputError", "UsageError"),
    "compsize.plan.records": ("MarginsResult", "Plan", "SizeResult"),
    "compsize.report.write": ("write_report",),
    "compsize.study.new": ("write_network",),
    "compsize.study.read_network": ("read_network",),
    "compsize.study.read_study": ("read_study",),
    "compsize.study.records": ("NetworkTables", "Study"),
}
_HOME_OF = {name: module for module, names in _HOMES.items() for name in names}


def __getattr__(name: str) -> Any:
    if name == "__version__":
        from importlib.metadata import version

        return version("compsize")
    if name not in _HOME_OF:
        raise AttributeError(f"module 'compsize' has no attribute {name!r}")
    return getattr(import_module(_HOME_OF[name]), name)


def __dir__() -> list[str]:
    return sorted([*__all__, "__version__"])
