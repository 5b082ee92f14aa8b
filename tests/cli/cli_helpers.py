"""Running the program in this process, and a two-bus study with an answer in closed form."""

from __future__ import annotations

import contextlib
import io
from dataclasses import dataclass
from pathlib import Path

from compsize.cli.main import main

TAN = 0.32868410517886310
"""Tangent of the angle of power factor 0.95."""


@dataclass(frozen=True)
class Outcome:
    """Exit code, standard output, standard error."""

    code: int
    out: str
    err: str


def run(*arguments: object) -> Outcome:
    """Run the program with these arguments."""
    out, err = io.StringIO(), io.StringIO()
    with contextlib.redirect_stdout(out), contextlib.redirect_stderr(err):
        code = main([str(argument) for argument in arguments])
    return Outcome(code, out.getvalue(), err.getvalue())


def two_bus_study(folder: Path, margin_pct: float = 5.0) -> Path:
    """A source of 1 pu behind two lines of X = 0.5 each, 80 MW at power factor 0.95, banks in steps of 10 Mvar.

    With one line out the closed form of two buses gives margins of -9.5066, -4.7438, 0.5483, 6.4629, 13.1168
    and 20.6579 % for 0 to 5 steps (Van Cutsem and Vournas 1998, chapter 2), so 5 % takes three steps.
    """
    network = folder / "network"
    network.mkdir(parents=True)
    (network / "network.toml").write_text("base_mva = 100.0\nfrequency_hz = 50.0\n")
    (network / "buses.csv").write_text("bus,kv,v_min_pu,v_max_pu\nSource,110,0.5,1.5\nLoad,110,0.5,1.5\n")
    (network / "loads.csv").write_text(f"load,bus,p_mw,q_mvar\nTown,Load,80,{80 * TAN!r}\n")
    lines = "branch,from_bus,to_bus,r_pu,x_pu\nNorth,Source,Load,0,0.5\nSouth,Source,Load,0,0.5\n"
    (network / "branches.csv").write_text(lines)
    (network / "generators.csv").write_text("generator,bus,p_mw,v_set_pu,slack\nGrid,Source,80,1,yes\n")
    (folder / "study.toml").write_text(
        'title = "Two buses"\nnetwork = "network"\n'
        f'[growth]\nloads = "all"\n[[requirement]]\ncases = "outages"\nmargin_pct = {margin_pct}\n'
        '[contingencies]\ntable = "contingencies.csv"\nbank_outage = "none"\n'
        '[candidates]\ntable = "candidates.csv"\nequipment = "equipment.csv"\n'
    )
    (folder / "contingencies.csv").write_text("contingency,kind,element\nNorth out,branch,North\n")
    (folder / "candidates.csv").write_text("site,equipment,max_steps\nLoad,Bank,5\n")
    (folder / "equipment.csv").write_text(
        "equipment,kind,step_mvar,cost_fixed,cost_per_step\nBank,bank,10,1000000,200000\n"
    )
    return folder
