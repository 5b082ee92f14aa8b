"""Raw reading and typing of tables."""

from __future__ import annotations

import math
from pathlib import Path

import numpy as np
import openpyxl
import pytest
from openpyxl.styles import numbers
from study_helpers import same

from compsize.errors import InputError
from compsize.study.files import Faults
from compsize.study.new import write_network
from compsize.study.read_network import read_network
from compsize.study.tables import parse_csv

TINY = {
    "network.toml": 'base_mva = 100\nfrequency_hz = 50\ntitle = "tiny"\n',
    "buses.csv": "bus,kv\n01,110\nNA,110\n",
    "loads.csv": "load,bus,p_mw,q_mvar\n1,NA,50,10\n",
    "branches.csv": "branch,from_bus,to_bus,r_pu,x_pu\na,01,NA,0.01,0.1\n",
    "generators.csv": "generator,bus,p_mw,v_set_pu,slack\nG,01,50,1.02,yes\n",
}


def make(folder: Path, **changes: str | bytes | None) -> Path:
    """Writes the tiny network with some files changed (None: left out); ``_`` stands for ``.``."""
    folder.mkdir(exist_ok=True)
    files: dict[str, str | bytes | None] = {**TINY}
    for name, content in changes.items():
        files[name.replace("_csv", ".csv").replace("_toml", ".toml")] = content
    for name, content in files.items():
        if content is not None:
            (folder / name).write_bytes(content if isinstance(content, bytes) else content.encode())
    return folder


def only(path: Path) -> str:
    """The one fault of a network as text."""
    with pytest.raises(InputError, match="1 fault in the input") as caught:
        read_network(path)
    return str(caught.value.faults[0])


def test_defaults_are_those_of_the_interface(tmp_path: Path) -> None:
    """Absent columns take the defaults that the interface lists, and absent tables are empty."""
    network = read_network(make(tmp_path / "n"))
    assert network.buses.v_min_pu.tolist() == [0.95, 0.95]
    assert network.buses.v_max_pu.tolist() == [1.05, 1.05]
    assert network.buses.monitored.all()
    assert network.buses.area == ("", "")
    assert np.isnan(network.buses.v_pu).all()
    assert network.branches.tap.tolist() == [1.0]
    assert network.branches.b_pu.tolist() == [0.0]
    assert network.branches.regulated_bus == ("",)
    assert math.isnan(network.branches.rating_mva[0])
    assert network.generators.q_min_mvar.tolist() == [-math.inf]
    assert network.generators.q_max_mvar.tolist() == [math.inf]
    assert math.isnan(network.generators.p_max_mw[0])
    assert network.loads.status.all()
    assert network.shunts.shunt == ()
    assert network.svcs.svc == ()
    assert network.svcs.q_max_mvar.dtype == np.float64
    assert not network.buses.kv.flags.writeable


def test_ids_stay_text(tmp_path: Path) -> None:
    """01 and NA are ids as they stand, and blanks around a cell are trimmed."""
    folder = make(tmp_path / "n", buses_csv="bus , kv\n 01 ,110\n NA,110 \n")
    assert read_network(folder).buses.bus == ("01", "NA")


@pytest.mark.parametrize(
    "content",
    [
        b"\xef\xbb\xbfbus,kv\r\n01,110\r\nNA,110\r\n",
        b"bus;kv\n01;110\nNA;110\n",
        b'"bus","kv"\n"01","110"\n"NA",110',
        b"\n,\nbus,kv,,\n01,110,,\n\nNA,110,,\n,,,\n",
        b"bus,kv\r01,110\rNA,110\r",
    ],
    ids=["byte-order mark", "semicolon", "quotes", "blank rows and columns", "carriage returns"],
)
def test_dialects_read_alike(tmp_path: Path, content: bytes) -> None:
    """What spreadsheets write as CSV reads as the same table."""
    same(read_network(make(tmp_path / "a", buses_csv=content)), read_network(make(tmp_path / "b")))


@pytest.mark.parametrize(
    ("changes", "words"),
    [
        ({"buses_csv": ""}, "buses.csv: the file is empty. Give"),
        ({"buses_csv": "bus,kv\n01,110\nNA\n"}, "buses.csv, row 3: 1 cells where the header has 2 columns. Give"),
        ({"buses_csv": "bus,kv\n01,110\nNA,110,9\n"}, "buses.csv, row 3: 3 cells where"),
        ({"buses_csv": "bus,kv,kv\n01,110,1\nNA,110,1\n"}, "row 1, kv: two columns are named 'kv'. Remove"),
        ({"buses_csv": "bus,,kv\n01,1,110\nNA,1,110\n"}, "row 1: column 2 has no name. Name"),
        ({"buses_csv": "bus,kv,v_mn_pu\n01,110,1\nNA,110,1\n"}, "unknown column 'v_mn_pu'. Did you mean 'v_min_pu'?"),
        ({"buses_csv": "bus,kv\n01,110\nNA,110\n01,110\n"}, "row 4, bus: the bus '01' stands twice (also in row 2)"),
        ({"buses_csv": "bus,kv\n01,\nNA,110\n"}, "buses.csv, row 2, kv: the cell is blank. A value is required"),
        ({"buses_csv": "bus,kv\n01,110 kV\nNA,110\n"}, "row 2, kv: '110 kV' is not a number. Write"),
        ({"buses_csv": 'bus,kv\n01,"110,5"\nNA,110\n'}, "Write the decimal point: 110.5"),
        ({"buses_csv": "bus,kv\n01,nan\nNA,110\n"}, "'nan' is not a number"),
        ({"buses_csv": "bus,kv\n01,inf\nNA,110\n"}, "'inf' is not a number"),
        ({"buses_csv": "bus,kv\n01,1e999\nNA,110\n"}, "'1e999' is too large"),
        ({"buses_csv": "bus,kv\n01,1_10\nNA,110\n"}, "'1_10' is not a number"),
        ({"buses_csv": "bus,kv\n01,-110\nNA,110\n"}, "row 2, kv: -110 is out of range. Permitted: above 0 kV."),
        ({"buses_csv": "bus,kv\n01,0\nNA,110\n"}, "row 2, kv: 0 is out of range"),
        ({"buses_csv": b"bus,kv\n01,110\nNA,110\nM\xfchle,110\n"}, "buses.csv, row 4: the file is not encoded"),
        ({"buses_csv": "bus,kv\n01,110\nNA,110\n".encode("utf-16")}, "encoded in UTF-16. Save it as UTF-8"),
        ({"buses_csv": b"bus,kv\n01,110\nNA,110\0\n"}, "holds zero bytes"),
        ({"buses_csv": 'bus,kv\n"01,110\nNA,110\n'}, "not valid CSV"),
        ({"buses_csv": "bus,kv,monitored\n01,110,perhaps\nNA,110,no\n"}, "'perhaps' is neither yes nor no. Write yes"),
        ({"buses_csv": 'bus,kv,area\n01,110,"a\nb"\nNA,110,\n'}, "holds a line break"),
        ({"network_toml": "base_mva = 100\n"}, "toml, frequency_hz: the required key"),
        ({"network_toml": "base_mva = 100\nfrequency_hz = 50\nbase = 1\n"}, "Did you mean 'base_mva'?"),
        ({"network_toml": "base_mva = 100\nfrequency_hz = fifty\n"}, "network.toml, row 2: the TOML syntax is wrong"),
        ({"network_toml": 'base_mva = "100"\nfrequency_hz = 50\n'}, "base_mva: '100' is not a number. Write"),
        ({"network_toml": "base_mva = nan\nfrequency_hz = 50\n"}, "base_mva: nan is not a number"),
        ({"network_toml": "base_mva = true\nfrequency_hz = 50\n"}, "base_mva: true is not a number"),
        ({"network_toml": None}, "network.toml: the file does not exist"),
        ({"branches_csv": None}, "branches.csv: the required table is missing. Add"),
        ({"generators_csv": None, "generator_csv": "x"}, "the table is missing. Rename 'generator'"),
        ({"loads_csv": None, "load_csv": "x"}, "loads.csv: the table is missing. Rename 'load'"),
        ({"loads_csv": "load,bus,p_mw,q_mvar\n1,NB,50,10\n"}, "row 2, bus: there is no bus 'NB'. Did you mean 'NA'?"),
        ({"loads_csv": "load,bus,p_mw\n1,NA,50\n"}, "the required column 'q_mvar' is missing. Add"),
        (
            {"svcs_csv": "svc,bus,kind,q_min_mvar,q_max_mvar,v_ref_pu\nS,NA,svcs,-1,1,1\n"},
            "row 2, kind: 'svcs' is not a valid kind. Did you mean 'svc'?",
        ),
    ],
)
def test_every_fault_of_a_table_names_place_and_remedy(
    tmp_path: Path, changes: dict[str, str | bytes | None], words: str
) -> None:
    """A spoilt table gives exactly one fault that names file, row or column, and what to do."""
    assert words in only(make(tmp_path / "n", **changes))


def book_of(folder: Path, path: Path) -> openpyxl.Workbook:
    """The tables of a folder as the sheets of a workbook, numbers as numbers."""
    book = openpyxl.Workbook()
    book.remove(book.active)
    for file in sorted(folder.glob("*.csv")):
        sheet = book.create_sheet(file.stem)
        raw = parse_csv(file.read_bytes(), file.name, Faults())
        assert raw is not None
        sheet.append(raw.header)
        for row in raw.rows:
            sheet.append([_as_cell(cell) for cell in row])
    sheet = book.create_sheet("network")
    for row in (["key", "value"], ["base_mva", 100], ["frequency_hz", 50.0], ["title", "tiny"]):
        sheet.append(row)
    book.save(path)
    return book


def _as_cell(text: str) -> str | float | None:
    if not text:
        return None
    if text.startswith("0") and text.isdigit() and len(text) > 1:
        return text
    try:
        return float(text)
    except ValueError:
        return text


def test_a_workbook_equals_the_folder(tmp_path: Path) -> None:
    """The same tables as sheets of a workbook give the same network; integer ids lose their .0."""
    folder = make(tmp_path / "n", shunts_csv="shunt,bus,b_mvar\n7,NA,12.5\n")
    book_of(folder, tmp_path / "n.xlsx")
    network = read_network(tmp_path / "n.xlsx")
    same(network, read_network(folder))
    assert network.loads.load == ("1",)
    assert network.shunts.shunt == ("7",)


def test_a_large_workbook_equals_the_folder(tmp_path: Path, shared) -> None:  # type: ignore[no-untyped-def]
    """The 118-bus network reads alike from tables and from a workbook."""
    network = read_network(shared("networks/ieee118"))
    write_network(network, tmp_path / "n")
    book = book_of(tmp_path / "n", tmp_path / "n.xlsx")
    book["network"]["B4"] = network.title or None
    book["network"].append(["source", network.source])
    book["network"]["B3"] = network.frequency_hz
    book.save(tmp_path / "n.xlsx")
    same(read_network(tmp_path / "n.xlsx"), network)


def test_cells_of_a_workbook_that_are_no_values(tmp_path: Path) -> None:
    """Dates, error values and formulas without a stored value are faults with sheet, row and column."""
    folder = make(tmp_path / "n")
    book = book_of(folder, tmp_path / "n.xlsx")
    import datetime

    book["loads"]["A2"] = datetime.datetime(2024, 1, 2)
    book["loads"]["A2"].number_format = numbers.FORMAT_DATE_YYYYMMDD2
    book["branches"]["E2"] = "=1/10"
    book["generators"]["C2"] = "#N/A"
    book.save(tmp_path / "n.xlsx")
    with pytest.raises(InputError, match="faults in the input") as caught:
        read_network(tmp_path / "n.xlsx")
    text = str(caught.value)
    assert "n.xlsx, sheet loads, row 2, load: the cell holds a date" in text
    assert "n.xlsx, sheet branches, row 2, x_pu: the formula has no stored value" in text
    assert "n.xlsx, sheet generators, row 2, p_mw: the cell holds the error #N/A" in text


@pytest.mark.parametrize("content", [b"", b"no workbook", b"PK\x03\x04 broken"])
def test_a_damaged_workbook_is_one_fault(tmp_path: Path, content: bytes) -> None:
    """A file that only claims to be a workbook is one fault that names it."""
    (tmp_path / "n.xlsx").write_bytes(content)
    assert "n.xlsx: the workbook cannot be read" in only(tmp_path / "n.xlsx")


def test_a_truncated_workbook_is_one_fault(tmp_path: Path) -> None:
    """A workbook with a damaged part inside is one fault, not a failure of the program."""
    book_of(make(tmp_path / "n"), tmp_path / "n.xlsx")
    import zipfile

    with zipfile.ZipFile(tmp_path / "n.xlsx") as old, zipfile.ZipFile(tmp_path / "m.xlsx", "w") as new:
        for name in old.namelist():
            content = old.read(name)
            new.writestr(name, content[: len(content) // 2] if "sheet1" in name else content)
    assert "m.xlsx: the workbook cannot be read" in only(tmp_path / "m.xlsx")


def test_a_missing_network_is_one_fault(tmp_path: Path) -> None:
    """A path that names nothing, and a kind of file that holds no network, are faults with a remedy."""
    assert "there is no such file or folder. Name a folder" in only(tmp_path / "none")
    (tmp_path / "n.ods").write_bytes(b"x")
    assert "a network cannot be read from a .ods file" in only(tmp_path / "n.ods")
