"""The answer as plain text."""

from __future__ import annotations

from dataclasses import replace

from sample_results import AFTER, BEFORE, MARGINS, OPTIMAL, nasty_result

from compsize.cli.text import answer_lines, block_of, figure_lines, note_lines, table_lines
from compsize.report.blocks import Cell, Column, Figures, Table
from compsize.report.content import page_of


def margin_rows(result: object, most: int = 12) -> list[str]:
    table = block_of(page_of(result), "margins", Table, "margins")  # type: ignore[arg-type]
    assert table is not None
    return table_lines(table, most=most)


def test_cases_stand_worst_first() -> None:
    """The cases that miss their requirement come first, the furthest from it at the top."""
    rows = margin_rows(MARGINS)
    names = [row.split("  ")[1] for row in rows[3:]]
    assert names[:2] == ["Oakmere-Tarnside", "Fellhead-Oakmere 1"]
    assert names[-1] == "intact"


def test_a_miss_is_never_rounded_to_a_pass() -> None:
    """A margin of 11.9999 MW where 12 MW are required is shown below 12."""
    short = replace(BEFORE[1], margin_mw=11.9999, nose_mw=251.9999)
    rows = margin_rows(replace(MARGINS, cases=(short,)))
    assert "12.00" in rows[-1]
    assert "11.99" in rows[-1]


def test_a_long_table_is_cut_and_says_so() -> None:
    """Only the worst rows are shown, and how many are not."""
    rows = margin_rows(OPTIMAL, most=3)
    assert rows[-1] == f"  ... and {len(AFTER) - 3} more"


def test_figures_name_cost_and_bound() -> None:
    """Cost, bound, gap and proof stand one below the other."""
    figures = block_of(page_of(OPTIMAL), "figures", Figures)
    assert figures is not None
    lines = figure_lines(figures)
    assert lines[0].split() == ["Cost", "4,430,000", "EUR"]
    assert lines[1].split()[:3] == ["Lower", "bound", "4,430,000"]


def test_columns_line_up_in_any_script() -> None:
    """Numbers end in the same column of a terminal also below a name in wide characters."""
    columns = (Column("case", "Case", "id"), Column("mw", "Margin", "number", "MW"))
    rows = tuple((Cell(name, name), Cell(1.0, "1.00")) for name in ("変電所", "A", "Zürich"))
    lines = table_lines(Table("t", ("Margins",), columns, rows))
    wide = [len(line) + sum(ord(character) > 0x2E80 for character in line) for line in lines[1:]]
    assert len(set(wide)) == 1


def test_minus_is_one_that_programs_read() -> None:
    """Negative margins carry the plain minus of a keyboard, so that they can be copied."""
    text = "\n".join(margin_rows(MARGINS))
    assert "-4.26" in text
    assert "\N{MINUS SIGN}" not in text


def test_names_of_the_study_are_left_alone() -> None:
    """A dash in a name stays the dash it is."""
    named = replace(BEFORE[0], case="Fellhead\N{EN DASH}Oakmere")
    assert "Fellhead\N{EN DASH}Oakmere" in "\n".join(margin_rows(replace(MARGINS, cases=(named,))))


def test_nothing_steers_the_terminal() -> None:
    """Characters that are not printable do not reach the terminal, whatever a title holds."""
    result = replace(nasty_result(), title="\x1b[2Jgone", sentence="a\x07b", notes=("c\rd",))
    page = page_of(result)
    table = block_of(page, "plan", Table, "plan")
    assert table is not None
    lines = [*answer_lines(page), *table_lines(table), *note_lines(page)]
    assert all(line.isprintable() for line in lines)
    assert any("gone" in line for line in lines)
