"""Writes validation.md from the checks of the tests: `python docs/make_validation.py` (some minutes, needs ../shared).

The tests make its quick rows again and compare (tests/validation/test_validation_page.py).
"""

from __future__ import annotations

import sys
import textwrap
from collections.abc import Iterable, Iterator
from dataclasses import dataclass
from pathlib import Path

ROOT = Path(__file__).resolve().parents[1]
PAGE = Path(__file__).with_name("validation.md")
SHARED = ROOT.parent / "shared"
for _folder in ("validation", "verify", "nose", "margin", "sizing"):
    if str(ROOT / "tests" / _folder) not in sys.path:
        sys.path.append(str(ROOT / "tests" / _folder))

import checks  # noqa: E402
import general_nlp  # noqa: E402
import nordic_system as nordic  # noqa: E402
from margin_studies import single, study_of  # noqa: E402
from second_opinion import NOT_LOCATED, answer  # noqa: E402
from verify_networks import DATA, everything, read  # noqa: E402

from compsize.api import margins  # noqa: E402
from compsize.study.read_network import read_network  # noqa: E402
from compsize.verify.model import NotEvaluable, build_model  # noqa: E402
from compsize.verify.path import trace  # noqa: E402

HEAD = """\
# Validation

Every check value of the program: what is computed, where the expected value comes from, what comes out, and how far
apart the two are. This page is made by `python docs/make_validation.py`, which runs the functions of the tests in
`tests/validation/`; do not edit it. A difference is relative to the expected value, and absolute where that is below 1.

| Class of check | Difference allowed | In the normal tests |
|---|---|---|
| closed forms: power at the nose, solved voltages | 1e-9 | yes |
| closed forms: voltage at a fold, which is free there to second order | 1e-6 | yes |
| change-over from fold to limit-induced nose, where the two coincide | 2e-4 in the size of the device | yes |
| published values | the digits published | yes |
| conditions of a nose with 50 digits | 1e-10 | yes |
| general nonlinear programme (NLP), stopped at 1e-10 | 1e-8 | networks of 14, 30 and 118 buses |
| reference noses by path following and a general NLP, which agree to 1e-6 | 1e-8 | yes |
| Nordic system, and large networks: independent path follower | 1e-5 MW; 1e-8 | Nordic: six cases a point |

The normal tests make these tables again and compare them with this page, but for the networks other than 14, 30 and 118
buses and the comparison of all Nordic noses with the independent path; the Nordic system is skipped where its figures
are not at hand. A general NLP finds the largest loading near its start, which is the nose only where the curve of
solutions turns once near it.
"""

PLAIN = ("Quantity", "Source", "Expected", "Computed", "Difference")
NLP_NETWORKS = {
    False: ("ieee14", "ieee30", "ieee57", "ieee118", "ieee300", "pegase1354", "poland2383", "rte6468"),
    True: ("ieee14", "ieee30", "ieee57", "ieee118", "ieee300"),
}
"""Where the general programme is asked, without and with reactive limits; elsewhere it takes long or finds nothing."""
PATH_NETWORKS = {False: ("pegase2869", "pegase9241"), True: ("pegase1354", "poland2383", "pegase2869")}
"""Where the path follower of the verification is asked instead."""
NETWORKS = {
    "ieee14": 14,
    "ieee30": 30,
    "ieee57": 57,
    "ieee118": 118,
    "ieee300": 300,
    "pegase1354": 1354,
    "poland2383": 2383,
    "pegase2869": 2869,
    "rte6468": 6468,
    "pegase9241": 9241,
}


@dataclass(frozen=True)
class Section:
    """A table with its title and a few words; cells are text, the first one names the row."""

    title: str
    words: str
    head: tuple[str, ...]
    rows: tuple[tuple[str, ...], ...]

    def __str__(self) -> str:
        lines = ["| " + " | ".join(cells) + " |" for cells in (self.head, ("---",) * len(self.head), *self.rows)]
        return f"## {self.title}\n\n{textwrap.fill(self.words, 120)}\n\n" + "\n".join(lines) + "\n"


def number(value: float) -> str:
    return f"{value:.9g}"


def difference(value: float) -> str:
    return "0" if value == 0.0 else f"{value:.1e}"


def plain(title: str, words: str, found: Iterable[checks.Check]) -> Section:
    """A section of check values. Raises ValueError where one misses what is allowed."""
    rows = []
    for check in found:
        if not check.difference <= check.tolerance:
            raise ValueError(f"{check.quantity}: {check.ours!r} against {check.expected!r}")
        cells = (check.quantity, check.source, number(check.expected), number(check.ours))
        rows.append((*cells, difference(check.difference)))
    return Section(title, words, PLAIN, tuple(rows))


def check_sections() -> Iterator[Section]:
    """Everything with one expected value."""
    yield plain("Two buses", "A source of 1 pu behind an impedance, one load.", checks.two_bus_checks())
    yield plain(
        "SVC and STATCOM",
        "At the load of two buses, E = V_ref = 1, X = 0.5, unity power factor, no slope. With a junction: E = "
        "1.05, 0.1 to "
        "the junction and 0.4 to the load; there a device lowers the nose.",
        checks.device_checks(),
    )
    yield plain(
        "Sizing",
        "Two lines of 0.5 pu feed 80 MW at 0.95 lagging, one of them is lost; steps of 10 Mvar at the load.",
        checks.sizing_checks(),
    )
    yield plain(
        "The IEEE 14-bus system as published",
        "Solved state, and the nose with all loads and all generation but the slack's in proportion.",
        checks.published_checks(),
    )
    yield plain(
        "Fifty digits",
        "F = 0 with det J = 0 for a fold, with both equations of the device that reaches its limit for a corner.",
        checks.sharp_checks(),
    )
    yield plain(
        "General nonlinear programme",
        "The largest loading that the power flow allows, reactive limits as relaxed complementarity, solved by an "
        "interior-point method from the base point. It is built from the tables alone.",
        checks.programme_checks(),
    )


def reference_section() -> Section:
    """How many noses of the reference are met."""
    rows = []
    for item in checks.reference_summaries():
        cells = (f"{item.network}, {'with' if item.limits == 'yes' else 'without'} limits", str(item.noses))
        rows.append((*cells, str(item.kinds_right), difference(item.worst)))
    return Section(
        "Reference noses",
        "Intact networks, single outages and added shunts in `tests/data/networks/reference_open.csv`, each "
        "found by path "
        "following and by a general NLP. Differences count 1 + added / base load.",
        ("Network", "Noses", "Kinds right", "Worst difference"),
        tuple(rows),
    )


def network_row(folder: Path, limits: bool, ask: bool) -> tuple[str, ...]:
    """The intact nose of one network and, if asked for, that of another method where one is named for it."""
    net = read_network(folder)
    growth = everything(net, generator_limits=limits)
    (row,) = margins(study_of(net, (), growth), workers=1).cases
    name = f"{folder.name}, {'with' if limits else 'without'} limits"
    if row.margin_mw is None:
        return (name, number(row.base_mw), row.status, "", "", "", "")
    ours = row.margin_mw / row.base_mw
    cells = (name, number(row.base_mw), number(ours), row.nose_kind)
    if ask and folder.name in NLP_NETWORKS[limits]:
        answer = general_nlp.solve(net, limits)
        if not answer.solved:
            return (*cells, "general NLP", "no answer", "")
        method, there = "general NLP", answer.loading
    elif ask and folder.name in PATH_NETWORKS[limits]:
        model = build_model(net, growth)
        assert not isinstance(model, NotEvaluable)
        path = trace(model)
        method, there = f"independent path, {path.kind}", path.t_mw / model.base_mw
    else:
        return (*cells, "", "", "")
    return (*cells, method, number(there), difference(abs(ours - there) / max(1.0, abs(there))))


def network_section(names: Iterable[str], folder: Path, ask: bool = True) -> Section:
    """Intact noses; without ``ask`` the columns of the other method stay blank."""
    rows = [network_row(folder / name, limits, ask) for name in names for limits in (False, True)]
    return Section(
        "Open networks",
        "Ten networks of 14 to 9,241 buses made from PGLib-OPF v23.07 (IEEE PES Task Force on Benchmarks for "
        "Validation of "
        "Emerging Power System Algorithms, arXiv:1908.02788, CC BY 4.0); the name ends with the number of "
        "buses. Intact; all "
        "loads grow at constant power and power factor as base, pick-up in proportion, taps locked, slack "
        "without reactive "
        "limits. Other methods: the general NLP, or the path "
        "follower of the verification, which shares no code with the engine. Blank: neither was asked; "
        "there the general NLP finds no answer or ends elsewhere, and the path follower takes many minutes.",
        ("Network", "Base load [MW]", "Added / base load", "Kind", "Other method", "Its answer", "Difference"),
        tuple(rows),
    )


def nordic_sections() -> Iterator[Section]:
    """The published states, and both operating points side by side."""
    rows = []
    for point in nordic.POINTS:
        fit = nordic.published_fit(point)
        rows.append((f"{point}: largest mismatch of a bus but the slack's [MVA]", "", number(round(fit.worst_mva, 6))))
        if point == "A":
            for words, there, here in (
                ("A: slack g20 [MW]", nordic.PUBLISHED_SLACK.real, fit.slack_mva.real),
                ("A: slack g20 [Mvar]", nordic.PUBLISHED_SLACK.imag, fit.slack_mva.imag),
                ("A: losses [MW]", nordic.PUBLISHED_LOSSES, fit.losses_mw),
            ):
                rows.append((words, number(there), number(round(here, 4))))
    yield Section(
        "Nordic voltage-stability test system, published states",
        "IEEE PES Task Force report PES-TR19 (2015). Mismatch of the published voltages in the tables, with complex "
        "admittances, branch by branch; units give their MW and the Mvar that they need. In B the units g15, "
        "g15b, g18 and "
        "g18b have half the Qmax that is listed for the whole plant. Qmin is not published: units are "
        "unlimited below, since "
        "a limit at a fixed part of the rating would contradict the published state of B.",
        ("Quantity", "Published", "From the tables"),
        tuple(rows),
    )
    found = {(point, taps): nordic.noses(point, taps) for taps in nordic.TAPS for point in nordic.POINTS}

    def cell(point: str, taps: str, line: str) -> str:
        case = found[point, taps][line]
        return case.status if case.margin_mw is None else f"{case.margin_mw:.4f} {case.nose_kind}"

    lines = list(found["A", "locked"])
    yield Section(
        "Nordic voltage-stability test system, noses",
        "Margin [MW] and kind of nose, intact and for the loss of each 400 kV line. The loads of the Central "
        "area grow at "
        "constant power and power factor (6,190 MW at both points), the slack g20 picks up within its "
        "Qmax. A negative margin: no solution at base load. Tap changers move without steps or dead band; the "
        "pairs at 1044 "
        "and 1045 move together and are one transformer of twice the rating.",
        ("Lost", *(f"{point}, taps {taps}" for taps in nordic.TAPS for point in nordic.POINTS)),
        tuple((line, *(cell(point, taps, line) for taps in nordic.TAPS for point in nordic.POINTS)) for line in lines),
    )


def open_section() -> Section:
    """What is known to be wrong, beside the rows of the Nordic system that say so."""
    network, lost = NOT_LOCATED
    net = read(network)
    growth = everything(net, generator_limits=False)
    row = margins(study_of(net, [single("branch", lost)], growth), workers=1).cases[1]
    there = answer(network, False, lost).loading * row.base_mw
    ours = row.status if row.margin_mw is None else f"{row.margin_mw:.6f}"
    rows = [(f"{network} without branch {lost}, without limits: margin [MW]", "general NLP", f"{there:.6f}", ours)]
    if nordic.NORDIC.exists():
        for point in nordic.POINTS:
            plain_net = nordic.tables(point)
            (intact,) = margins(study_of(plain_net, (), nordic.central_growth(plain_net, "moving")), workers=1).cases
            _, mw = nordic.path_mw(point, "moving", "intact")
            ours = intact.status if intact.margin_mw is None else f"{intact.margin_mw:.6f}"
            name = f"Nordic {point}, two tap changers that hold the same bus left as two: margin [MW]"
            rows.append((name, "independent path", f"{mw:.6f}", ours))
    return Section(
        "Open differences",
        "Cases in which another method locates a nose and the engine does not; they are expected failures "
        "in the tests.",
        ("Case", "Source", "Expected", "Computed"),
        tuple(rows),
    )


def path_section() -> Section:
    """All noses of the Nordic system against the independent path follower."""
    rows = []
    for taps in nordic.TAPS:
        for point in nordic.POINTS:
            found = nordic.noses(point, taps)
            worst, right, apart = 0.0, 0, []
            for line, case in found.items():
                kind, mw = nordic.path_mw(point, taps, line)
                if case.margin_mw is None or abs(case.margin_mw - mw) > 1e-5 or case.nose_kind != kind:
                    apart.append(f"{line}: {mw:.4f} {kind}")
                    continue
                right += 1
                worst = max(worst, abs(case.margin_mw - mw))
            rows.append((f"{point}, taps {taps}", str(len(found)), str(right), difference(worst), "; ".join(apart)))
    return Section(
        "Nordic voltage-stability test system, independent path",
        "The same noses by the path follower of the verification, which shares no code with the engine: cases in which "
        "kind and margin agree to 1e-5 MW, and any others with its answer.",
        ("Point", "Cases", "Agree", "Worst difference of these [MW]", "Others, by the path follower"),
        tuple(rows),
    )


def page() -> str:
    """The whole page."""
    sections = [*check_sections(), reference_section(), network_section(NETWORKS, SHARED / "networks")]
    sections += [*nordic_sections(), path_section(), open_section()]
    return "\n".join([HEAD, *(str(section) for section in sections)])


def quick_sections() -> Iterator[Section]:
    """What the tests make again; cells left blank here are not compared."""
    yield from check_sections()
    yield reference_section()
    yield network_section(("ieee14", "ieee30", "ieee118"), DATA, ask=False)
    if nordic.NORDIC.exists():
        yield from nordic_sections()
    yield open_section()


if __name__ == "__main__":
    PAGE.write_text(page(), encoding="utf-8")
