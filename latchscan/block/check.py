"""Every problem of a block file at once, each with its line and column.

Three looks at the same text, as for a technology file: the YAML itself, the keys and values
against the typed model, and the names that stand in several places (`names`).
"""

from __future__ import annotations

from pydantic import ValidationError

from latchscan.block.model import Block, BlockFile
from latchscan.block.names import problems_with_names
from latchscan.technology.document import Document, FileKind, Found, read_document
from latchscan.technology.misfits import misfits
from latchscan.technology.problem import Problem, problem_at

BLOCK_FILE = FileKind(noun="block", most_bytes=1_000_000, most_nodes=20_000)
"""A chip has some thousand pins at most, each with three values."""


def validate_block(
    content: str | bytes, file_name: str
) -> tuple[Document, Block | None, list[Problem]]:
    """Block of a text, or None and everything that is wrong with it.

    Parameters
    ----------
    content
        The text, or a file's bytes.
    file_name
        Name to show in the problems.

    Returns
    -------
    document
        The text with the place of every key and value.
    block
        None exactly where there is a problem.
    problems
        Sorted by place, without repetition.
    """
    document = read_document(content, BLOCK_FILE)
    found: set[Found] = {(slip.place, slip.path, slip.message) for slip in document.slips}
    block = None
    if document.data is not None:
        try:
            block = BlockFile.model_validate(document.data)
        except ValidationError as error:
            found.update(misfits(document, error, BlockFile))
        found.update(problems_with_names(document))
    problems = sorted(problem_at(*entry, file_name) for entry in found)
    return document, (None if problems else block), problems


def check_block(content: str | bytes, file_name: str) -> list[Problem]:
    """Everything that is wrong with the text of a block file; empty where nothing is.

    Parameters
    ----------
    content
        The text, or a file's bytes.
    file_name
        Name to show in the problems.

    Examples
    --------
    >>> print(check_block("", "empty.yaml")[0])
    empty.yaml:1:1: the file is empty, expected a block
    """
    return validate_block(content, file_name)[2]
