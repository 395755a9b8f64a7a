"""The commands on block files; what they share with the others is in `cli_terminal`."""

from __future__ import annotations

from pathlib import Path
from typing import TYPE_CHECKING

import click

from latchscan.cli_terminal import (
    COULD_NOT_START,
    NOTHING_FAILED,
    available_cores,
    given_path,
    optional_path,
    print_out,
    progress,
)
from latchscan.errors import BlockError, OptionError

if TYPE_CHECKING:
    from latchscan.block.load import LoadedBlock
    from latchscan.layout.connections import Nets
    from latchscan.layout.source import LayoutSource
    from latchscan.technology.model import Technology

_TECHNOLOGY = "Technology: a YAML file, or the name of a shipped one (larch180, open130)."


@click.group(epilog="\b\nExample:\n  latchscan block draft chip.gds --tech larch180 > chip.yaml\n")
def block() -> None:
    """Work on block files: supplies, grounds and pins of a layout."""


@block.command(epilog="\b\nExample:\n  latchscan block check chip.yaml\n")
@click.argument("file", callback=given_path)
@click.option(
    "--layout",
    metavar="LAYOUT",
    callback=optional_path,
    help="Check also that this layout has the names; needs --tech.",
)
@click.option("--tech", metavar="T", help=_TECHNOLOGY)
def check(file: Path, layout: Path | None, tech: str | None) -> int:
    """List every problem of the block FILE.

    Prints one line a problem: file:line:column: key: what is wrong, what was expected.
    Exit status: 0 none, 2 some.
    """
    if (layout is None) != (tech is None):
        missing = "--tech" if tech is None else "--layout"
        raise OptionError(f"{missing}: expected with the other of --layout and --tech, got nothing")
    from latchscan.block.check import check_block
    from latchscan.block.load import load_block, read_block_file

    path, content = read_block_file(file)
    problems = [str(problem) for problem in check_block(content, str(path))]
    if not problems and layout is not None and tech is not None:
        problems = _misfits_of(load_block(path), layout, tech)
    print_out("".join(line + "\n" for line in problems or [f"{path}: no problems"]))
    return COULD_NOT_START if problems else NOTHING_FAILED


def _misfits_of(loaded: LoadedBlock, layout: Path, tech: str) -> list[str]:
    """What of a block file does not fit a layout, one line each."""
    from latchscan.block_fit import open_block_layout, problems_with_layout
    from latchscan.technology.load import load_technology

    technology = load_technology(tech).technology
    try:
        source = open_block_layout(layout, technology=technology, top=None, loaded=loaded)
    except BlockError as error:
        return [f"{error.message} ({error.hint})"]
    nets = _traced(source, technology)
    problems = problems_with_layout(
        loaded,
        nets=None if technology.conductors is None else nets,
        labels=source.labels(_pairs(technology)) if technology.conductors is None else nets.labels,
        box_um=source.bbox_um,
    )
    return [str(problem) for problem in problems]


def _pairs(technology: Technology) -> list[tuple[int, int]]:
    from latchscan.technology.quantities import layer_numbers

    return [layer_numbers(pair) for pair in technology.labels.layers]


def _traced(source: LayoutSource, technology: Technology) -> Nets:
    from latchscan.layout.nets import trace_nets
    from latchscan.tasks import open_workers

    with open_workers(available_cores(), progress()) as workers:
        return trace_nets(source, technology, workers)


@block.command(
    epilog="\b\nExample:\n  latchscan block draft chip.gds --tech larch180 > chip.yaml\n"
)
@click.argument("layout", callback=given_path)
@click.option("--tech", required=True, metavar="T", help=_TECHNOLOGY)
@click.option("--top", metavar="CELL", help="Top cell, when the layout has several.")
def draft(layout: Path, tech: str, top: str | None) -> int:
    """Print a first block file of LAYOUT, made of its own labels, to be corrected.

    Supplies, grounds and pins are guessed from the labels and the technology's names of
    supplies; comments say what each guess rests on.
    """
    from latchscan.draft import draft_block
    from latchscan.layout.source import open_layout
    from latchscan.technology.load import load_technology

    technology = load_technology(tech).technology
    source = open_layout(layout, technology=technology, top=top)
    nets = _traced(source, technology)
    print_out(draft_block(nets, technology, layout_name=source.name, top=source.top))
    return NOTHING_FAILED


@block.command()
def schema() -> int:
    """Print the JSON Schema of block files, for editors."""
    import json

    from latchscan.block.schema import block_schema

    print_out(json.dumps(block_schema(), indent=2) + "\n")
    return NOTHING_FAILED
