"""Reading a plan that a user wants judged: ``plan.csv`` as a result has it, or just its first columns."""

from __future__ import annotations

from pathlib import Path

from compsize.errors import InputError
from compsize.study.columns import Columns, References, read_columns
from compsize.study.files import Faults, FileReader
from compsize.study.records import Study
from compsize.study.schema import NOT_NEGATIVE, Column, Table, nearest_id
from compsize.study.tables import parse_csv

__all__ = ["PLAN", "read_plan"]

PLAN = Table(
    "plan",
    "new steps of equipment at sites",
    (
        Column("site", "text", "site of the study's candidates", required=True),
        Column("equipment", "text", "equipment that is a candidate there", required=True),
        Column("steps", "integer", "new steps", required=True, bounds=NOT_NEGATIVE),
        Column("kind", "text", "not read: the study says what the equipment is"),
        Column("step_mvar", "text", "not read"),
        Column("total_mvar", "text", "not read"),
        Column("cost", "text", "not read"),
    ),
    unique=False,
)


def read_plan(path: Path, study: Study) -> list[tuple[str, str, int]]:
    """Site, equipment and new steps of every row.

    Raises :class:`InputError` with all faults: what cannot be read, a pair that is no candidate of the
    study or stands twice, more steps than there is room for.
    """
    faults = Faults()
    content = FileReader(faults).bytes_of(path, str(path))
    raw = None if content is None else parse_csv(content, str(path), faults)
    if raw is None:
        raise InputError(faults)
    columns = read_columns(raw, PLAN, References(), faults)
    rows = list(zip(columns.texts["site"], columns.texts["equipment"], columns.numbers["steps"].tolist(), strict=True))
    _check(rows, columns, study, faults)
    faults.raise_if_any()
    return [(site, equipment, int(steps)) for site, equipment, steps in rows]


def _check(rows: list[tuple[str, str, float]], columns: Columns, study: Study, faults: Faults) -> None:
    room = {(c.site, c.equipment.equipment): c.max_steps - c.existing_steps for c in study.candidates}
    sites = {site for site, _ in room}
    seen: dict[tuple[str, str], int | None] = {}
    for at, (site, equipment, steps) in enumerate(rows):
        row = columns.row(at)
        if not site or not equipment:
            continue
        if site not in sites:
            remedy = nearest_id(site, sites, "site of the candidates")
            faults.add(columns.file, f"'{site}' is no site of the study's candidates.", remedy, row, "site")
        elif (site, equipment) not in room:
            here = [name for place, name in room if place == site]
            remedy = nearest_id(equipment, here, "candidate of this site")
            faults.add(columns.file, f"'{equipment}' is no candidate at {site}.", remedy, row, "equipment")
        elif (site, equipment) in seen:
            remedy = "Give each pair one row with all its steps."
            faults.add(columns.file, f"{site} with {equipment} stands twice.", remedy, row, "equipment")
        elif steps > room[site, equipment]:
            remedy = f"The study has room for {room[site, equipment]} new steps there."
            faults.add(columns.file, f"{steps:g} steps are too many.", remedy, row, "steps")
        seen[site, equipment] = row
