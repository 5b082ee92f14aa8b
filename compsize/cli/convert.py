"""``compsize convert``: a network in an open format to tables."""

from __future__ import annotations

from pathlib import Path

import click

from compsize.cli.check import network_counts, network_words
from compsize.cli.codes import DONE
from compsize.cli.options import Shared, shared_options
from compsize.cli.say import answer, answer_json

__all__ = ["command"]


@click.command("convert", short_help="A network in an open format to tables.")
@click.argument("source", type=click.Path(path_type=Path))
@click.argument("folder", type=click.Path(path_type=Path))
@shared_options
def command(source: Path, folder: Path, shared: Shared) -> int:
    """Write the network SOURCE as tables into FOLDER.

    SOURCE is a file in the IEEE Common Data Format, a CGMES folder or zip, a workbook, or a folder of
    tables. With --overwrite the tables of FOLDER are replaced; its other files stay.
    """
    from compsize.study.new import write_network
    from compsize.study.read_network import read_network

    tables = read_network(source)
    place = write_network(tables, folder, overwrite=shared.overwrite)
    counts = network_counts(tables)
    if shared.json:
        answer_json({"folder": str(place), "network": counts})
    else:
        answer(f"{place}: {network_words(counts)}")
    return DONE
