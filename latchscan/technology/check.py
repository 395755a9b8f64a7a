"""Every problem of a technology file at once, each with its line and column.

Three looks at the same text: the YAML itself (`document`), the keys and values against the
typed model (`misfits`), and the names that the file uses (`names`, `wiring`).  A file without
any problem becomes a `Technology`.
"""

from __future__ import annotations

from pydantic import ValidationError

from latchscan.technology.document import Found, read_document
from latchscan.technology.misfits import misfits
from latchscan.technology.model import Technology
from latchscan.technology.names import problems_with_names
from latchscan.technology.problem import Problem, problem_at


def validate(content: str | bytes, file_name: str) -> tuple[Technology | None, list[Problem]]:
    """Technology of a text, or None and everything that is wrong with it.

    Parameters
    ----------
    content
        The text, or a file's bytes.
    file_name
        Name to show in the problems.

    Returns
    -------
    technology
        None exactly where there is a problem.
    problems
        Sorted by place, without repetition.
    """
    document = read_document(content)
    found: set[Found] = {(slip.place, slip.path, slip.message) for slip in document.slips}
    technology = None
    if document.data is not None:
        try:
            technology = Technology.model_validate(document.data)
        except ValidationError as error:
            found.update(misfits(document, error))
        found.update(problems_with_names(document))
    problems = sorted(problem_at(*entry, file_name) for entry in found)
    return (None if problems else technology), problems


def check_technology(content: str | bytes, file_name: str) -> list[Problem]:
    """Everything that is wrong with the text of a technology file; empty where nothing is.

    Parameters
    ----------
    content
        The text, or a file's bytes.
    file_name
        Name to show in the problems.

    Examples
    --------
    >>> print(check_technology("", "empty.yaml")[0])
    empty.yaml:1:1: the file is empty, expected a technology
    """
    return validate(content, file_name)[1]
