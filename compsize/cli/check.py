"""``compsize check``: every fault of a study at once, or what it holds."""

from __future__ import annotations

from pathlib import Path
from typing import TYPE_CHECKING, Any

import click

from compsize.cli.codes import DONE
from compsize.cli.options import Shared, shared_options, study_argument
from compsize.cli.say import answer, answer_json, printable
from compsize.errors import InputError

if TYPE_CHECKING:
    from compsize.study.records import NetworkTables, Study

__all__ = ["command", "network_counts"]

PARTS = (
    ("buses", "bus", "buses"),
    ("branches", "branch", "branches"),
    ("generators", "generator", "generators"),
    ("loads", "load", "loads"),
    ("shunts", "shunt", "shunts"),
    ("svcs", "svc", "svcs"),
)
"""Table of a network, the column of its ids, and its rows in words."""


@click.command("check", short_help="List every fault of a study at once.")
@study_argument
@shared_options
def command(study: Path, shared: Shared) -> int:
    """Read STUDY and every file it names, and list every fault at once. Computes nothing."""
    from compsize.study.read_study import read_study

    try:
        found = read_study(study)
    except InputError as fault:
        if shared.json:
            answer_json({"sound": False, "faults": [vars(item) for item in fault.faults]})
        raise
    counts = study_counts(found)
    if shared.json:
        answer_json({"sound": True, "title": found.title, "study_hash": found.hash, **counts})
    else:
        answer("\n".join(_lines(found, counts)))
    return DONE


def network_counts(tables: NetworkTables) -> dict[str, int]:
    """How many rows each table of a network has."""
    return {name: len(getattr(getattr(tables, name), key)) for name, key, _ in PARTS}


def study_counts(study: Study) -> dict[str, Any]:
    """What a study holds, in numbers."""
    events = study.contingencies.events
    single = sum(event.name.startswith("branch:") for event in events)
    return {
        "network": network_counts(study.network),
        "growing_loads": len(study.growth.loads),
        "growing_mw": study.growth.base_mw,
        "cases": 1 + len(events),
        "listed_events": len(events) - single,
        "single_branches": single,
        "left_out": len(study.contingencies.left_out),
        "requirements": len(study.requirements),
        "candidates": len(study.candidates),
        "sites": len({candidate.site for candidate in study.candidates}),
    }


def network_words(counts: dict[str, int]) -> str:
    """``6 buses, 9 branches, ...``; tables without rows are left out."""
    words = ((counts[name], plural if counts[name] != 1 else key) for name, key, plural in PARTS)
    named = {"svcs": "SVCs", "svc": "SVC"}
    return ", ".join(f"{number:,} {named.get(word, word)}" for number, word in words if number)


def _lines(study: Study, counts: dict[str, Any]) -> list[str]:
    from compsize.report.basis import requirement_words
    from compsize.report.words import amount

    listed = [amount(counts["listed_events"], "listed event")] if counts["listed_events"] else []
    if counts["single_branches"]:
        listed.append(amount(counts["single_branches"], "single branch", "single branches"))
    cases = f"{amount(counts['cases'], 'case')}: " + ", ".join(["the intact network", *listed])
    if counts["left_out"]:
        cases += f"; {amount(counts['left_out'], 'branch', 'branches')} left out, whose loss splits the network"
    growing = f"{amount(counts['growing_loads'], 'load')} of {counts['growing_mw']:g} MW today"
    candidates = f"{amount(counts['candidates'], 'candidate')} at {amount(counts['sites'], 'site')}"
    pairs = [
        ("Network", network_words(counts["network"])),
        ("Load that grows", f"{growing} ({study.growth.description})"),
        ("Cases", cases),
        ("Requirement", "; ".join(map(requirement_words, study.requirements)) or "none"),
        ("Candidates", candidates if study.candidates else "none, so only margins can be computed"),
    ]
    wide = max(len(name) for name, _ in pairs)
    lines = [f"  {name.ljust(wide)}  {printable(words)}" for name, words in pairs]
    return [f"{printable(study.title) or 'Untitled study'}: no fault found", *lines]
