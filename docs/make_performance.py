"""Write docs/performance.md: effort and seconds of noses on this machine.

python docs/make_performance.py
"""

from __future__ import annotations

import platform
import sys
from pathlib import Path

HERE = Path(__file__).parent
sys.path.insert(0, str(HERE.parent / "tests" / "performance"))

from effort import Ready, folder_of, least_seconds, ready  # noqa: E402

from compsize.nose.engine import LEAP_NODES  # noqa: E402

NETWORKS = (
    "ieee14",
    "ieee30",
    "ieee57",
    "ieee118",
    "ieee300",
    "pegase1354",
    "poland2383",
    "pegase2869",
    "rte6468",
    "pegase9241",
)


def row(name: str, made: Ready) -> str:
    """One line of the table: whole nose, outages, near noses."""
    fast = made.grid.count >= LEAP_NODES
    repeats = 20 if made.grid.count < 500 else 3
    whole = least_seconds(lambda: made.engine.nose(made.intact, made.nose.base, fast=fast), repeats)
    outages = made.outages(max(1, made.grid.frm.size // 40))
    noses = [made.engine.nose(model, made.nose.base, fast=fast) for model in outages]
    mean = sum(nose.factorisations for nose in noses) / len(noses)
    total = least_seconds(lambda: [made.engine.nose(m, made.nose.base, fast=fast) for m in outages], 1)
    seconds = total / len(outages)
    bus = int(made.grid.load_bus[len(made.grid.load_bus) // 2])
    model = made.with_step(made.intact, bus, 0.1)
    near = made.engine.nose_near(model, made.nose)
    beside = least_seconds(lambda: made.engine.nose_near(model, made.nose), repeats)
    return (
        f"| {name} | {made.nose.factorisations} | {1e3 * whole:.2f} | {mean:.0f} | {1e3 * seconds:.2f} "
        f"| {'-' if near is None else near.factorisations} | {1e3 * beside:.2f} |"
    )


def main() -> None:
    lines = [
        "# Effort and speed",
        "",
        f"Written by `docs/make_performance.py` ({platform.machine()}, one thread).",
        "Seconds are the shortest of several runs on a shared machine and say little beyond their order; counters",
        "are the same everywhere, and those of the smaller networks are asserted in `tests/performance`.",
        "Networks: PGLib-OPF v23.07 (arXiv:1908.02788, CC BY 4.0), all loads growing, reactive limits of units held.",
        f"From {LEAP_NODES} nodes on long steps go ahead of the trace.",
        "",
        "| network | factorisations of the intact nose | ms | factorisations, mean of some 40 outages | ms "
        "| factorisations of a near nose (10 Mvar more at one bus) | ms |",
        "|---|---:|---:|---:|---:|---:|---:|",
    ]
    for name in NETWORKS:
        folder = folder_of(name)
        if folder is not None:
            lines.append(row(name, ready(folder)))
            print(lines[-1], file=sys.stderr)
    (HERE / "performance.md").write_text("\n".join(lines) + "\n", encoding="utf-8")


if __name__ == "__main__":
    main()
