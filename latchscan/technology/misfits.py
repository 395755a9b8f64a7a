"""What the typed model finds wrong, in words and at its place in the file.

`pydantic` reports errors as a type, a location and the value it got.  Here each becomes one
line for a person: the table `_WORDING` holds one sentence a type of error.
"""

from __future__ import annotations

import re
from collections.abc import Callable, Iterator, Mapping
from difflib import get_close_matches
from types import UnionType
from typing import Annotated, Any, NamedTuple, Union, get_args, get_origin

from pydantic import BaseModel, ValidationError
from pydantic_core import ErrorDetails

from latchscan.technology.document import (
    Document,
    Found,
    Path,
    Place,
    looks_decimal,
    one_line,
    shown_text,
)
from latchscan.technology.model import Quantity, Technology

UNITS = {
    "ohm_sq": "ohm per square",
    "ohm_cm": "ohm cm",
    "ohm_um": "ohm um",
    "ohm_m": "ohm m",
    "a_um2": "ampere per square um",
    "a_cm2": "ampere per square cm",
    "kohm": "kiloohm",
    "mohm": "milliohm",
    "ohm": "ohm",
    "cm3": "1/cm3",
    "um3": "1/um3",
    "m3": "1/m3",
    "nm": "nm",
    "um": "um",
    "mm": "mm",
    "cm": "cm",
    "m": "m",
    "mv": "mV",
    "v": "V",
    "ua": "uA",
    "ma": "mA",
    "a": "A",
    "k": "kelvin",
    "f": "degrees Fahrenheit",
    "c": "degrees Celsius",
}
"""Units at the end of a key, longer ones first; also those that people write by mistake."""

_KINDS_OF_KEY: Mapping[Path, str] = {("rules",): "rule", ("roles",): "role"}
_NUMBER_AND_UNIT = re.compile(r"[-+]?[0-9.]+(?:[eE][-+]?[0-9]+)?\s*[A-Za-z%/].*\Z")
_DECIMAL_COMMA = re.compile(r"[-+]?[0-9]+,[0-9]+\Z")
_SWITCHES = {"on": "true", "yes": "true", "y": "true", "off": "false", "no": "false", "n": "false"}


class _Misfit(NamedTuple):
    """One error of the model with everything a sentence about it needs."""

    document: Document
    path: Path
    error: ErrorDetails
    root: type[BaseModel]

    @property
    def got(self) -> str:
        """The value in the file as a message shows it."""
        value = self.error["input"]
        if isinstance(value, dict):
            return "a mapping"
        if isinstance(value, (tuple, list)):
            return "a list"
        if isinstance(value, bool):
            return "true" if value else "false"
        if isinstance(value, str):
            return f"text {shown_text(value)}"
        return f"the number {value:g}" if isinstance(value, float) else f"the number {value}"


def misfits(
    document: Document, error: ValidationError, root: type[BaseModel] = Technology
) -> Iterator[Found]:
    """Every error of the model, in words and with its place.

    Parameters
    ----------
    document
        The file.  What `document.blank` holds is already reported and left out here.
    error
        What the model raised for the document's data.
    root
        The model of the whole file.
    """
    found = [
        _Misfit(document, _path(details, document), details, root)
        for details in error.errors(include_url=False)
    ]
    meant = {
        (*misfit.path[:-1], nearest_key(misfit.path, root))
        for misfit in found
        if misfit.error["type"] == "extra_forbidden"
    }
    for misfit in found:
        if misfit.path in document.blank:
            continue
        # Wrong entries do not count, so that a list of them passes for an empty one.
        if misfit.error["type"] == "too_short" and misfit.error["input"]:
            continue
        # A misspelt key is one mistake, not an unknown and a missing one.
        if misfit.error["type"] == "missing" and misfit.path in meant:
            continue
        yield from _told(misfit)


def _path(details: ErrorDetails, document: Document) -> Path:
    path: Path = tuple(details["loc"])
    # The model marks an error in a dictionary's key by one more part.
    if path[-1:] == ("[key]",) and path not in document.keys:
        path = path[:-1]
    return path


def _told(misfit: _Misfit) -> Iterator[Found]:
    document, path, error, root = misfit
    kind = error["type"]
    if kind == "missing":
        yield _parent_place(document, path), path, _missing(path, root)
    elif kind == "extra_forbidden":
        yield document.keys[path], path, _unknown(path, root)
    elif error["loc"][-1:] == ("[key]",) and kind not in _WORDING:
        yield document.keys[path], path, error["msg"]
    elif error["loc"][-1:] == ("[key]",):
        message = "expected a name of small letters, digits and `_` that starts with a letter"
        yield document.keys[path], path, f"not a usable name, {message}"
    else:
        message = _WORDING.get(kind, _as_it_is)(misfit)
        for member in error.get("ctx", {}).get("members", [None]):
            here = _written(path if member is None else (*path, member), document)
            yield document.values[here], here, message


def _written(path: Path, document: Document) -> Path:
    """Path that the file has: a bare number stands for its own member ``typical``."""
    while path not in document.values:
        path = path[:-1]
    return path


def _parent_place(document: Document, path: Path) -> Place:
    parent = path[:-1]
    return document.keys.get(parent) or document.values[parent]


def _missing(path: Path, root: type[BaseModel]) -> str:
    field = _field(path, root)
    what = (field.description or "").split("\n")[0].rstrip(".") if field is not None else ""
    return f"missing, expected {what[:1].lower()}{what[1:]}" if what else "missing, expected it"


def _unknown(path: Path, root: type[BaseModel]) -> str:
    key = str(path[-1])
    what = _KINDS_OF_KEY.get(path[:-1], "key")
    near = nearest_key(path, root)
    if near:
        wrong, right = split_unit(key)[1], split_unit(near)[1]
        if right and wrong != right:
            in_unit = f"`{near}` with the number in {UNITS[right]}"
            if wrong:
                return f"wrong unit {shown_text(wrong)} in the key, expected {in_unit}"
            return f"unknown {what}, expected {in_unit}"
        return f"unknown {what}, expected `{near}`"
    return f"unknown {what}, expected one of {', '.join(valid_keys(path[:-1], root)) or 'none'}"


def split_unit(key: str) -> tuple[str, str]:
    """Key without its unit, and the unit; "" where it has none.

    Examples
    --------
    >>> split_unit("resistivity_ohm_cm")
    ('resistivity', 'ohm_cm')
    """
    for unit in UNITS:
        if key.endswith(f"_{unit}"):
            return key.removesuffix(f"_{unit}"), unit
    return key, ""


def nearest_key(path: Path, root: type[BaseModel] = Technology) -> str:
    """Valid key that an unknown one is most likely to mean, "" where none is near."""
    key = str(path[-1])
    valid = valid_keys(path[:-1], root)
    stem = split_unit(key)[0]
    same = [other for other in valid if split_unit(other)[0] == stem]
    return (same or get_close_matches(key, valid, n=1) or [""])[0]


def valid_keys(path: Path, root: type[BaseModel] = Technology) -> tuple[str, ...]:
    """Keys that the model has at a path; empty where keys are free or there is no mapping."""
    model = _annotation(path, root)
    if isinstance(model, type) and issubclass(model, BaseModel):
        return tuple(field.alias or name for name, field in model.model_fields.items())
    return ()


def _field(path: Path, root: type[BaseModel]) -> Any:
    model = _annotation(path[:-1], root)
    if isinstance(model, type) and issubclass(model, BaseModel):
        by_key = {field.alias or name: field for name, field in model.model_fields.items()}
        return by_key.get(str(path[-1]))
    return None


def _annotation(path: Path, root: type[BaseModel]) -> Any:
    """Type that the model has at a path, without its annotations; None where it has none."""
    here: Any = root
    for part in path:
        if isinstance(here, type) and issubclass(here, BaseModel):
            by_key = {field.alias or name: field for name, field in here.model_fields.items()}
            here = by_key[str(part)].annotation if part in by_key else None
        elif get_origin(here) in {tuple, dict}:
            arguments = get_args(here)
            here = arguments[0] if get_origin(here) is tuple else arguments[1]
        here = _bare(here)
    return here


def _bare(annotation: Any) -> Any:
    while get_origin(annotation) in {Annotated, Union, UnionType}:
        annotation = get_args(annotation)[0]
    return annotation


def _number(misfit: _Misfit) -> str:
    value = misfit.error["input"]
    if not isinstance(value, str):
        return f"got {misfit.got}, expected a number such as 12.5"
    if looks_decimal(value):
        plain = misfit.path in misfit.document.plain
        why = "is text to a YAML parser" if plain else "is in quotes and therefore text"
        return f"{one_line(value)} {why}, expected {one_line(_rewritten(value))}"
    if _DECIMAL_COMMA.match(value):
        return f"got {misfit.got}, expected {one_line(value.replace(',', '.'))} with a point"
    if _NUMBER_AND_UNIT.match(value):
        return f"got {misfit.got}, expected the number alone; its unit is the key's"
    return f"got {misfit.got}, expected a number such as 12.5"


def _rewritten(text: str) -> str:
    """Same number in a form that every YAML parser reads as one.

    Examples
    --------
    >>> _rewritten("1e-3")
    '1.0e-3'
    """
    mantissa, mark, exponent = text.lower().partition("e")
    sign = mantissa[:1] if mantissa[:1] in {"-", "+"} else ""
    whole, point, decimals = mantissa.removeprefix(sign).partition(".")
    whole = whole.lstrip("0") or "0"
    if not mark:
        return f"{sign}{whole}.{decimals or 0}" if point else f"{sign}{whole}"
    signed = exponent if exponent[:1] in {"-", "+"} else f"+{exponent}"
    return f"{sign}{whole}.{decimals or 0}e{signed}"


def _quantity_or_mapping(misfit: _Misfit) -> str:
    if _annotation(misfit.path, misfit.root) is not Quantity:
        keys = ", ".join(valid_keys(misfit.path, misfit.root))
        return f"got {misfit.got}, expected a mapping with the keys {keys}"
    if isinstance(misfit.error["input"], str):
        return _number(misfit)
    return f"got {misfit.got}, expected a number or a mapping with `typical`"


def _boolean(misfit: _Misfit) -> str:
    value = misfit.error["input"]
    meant = _SWITCHES.get(value.lower()) if isinstance(value, str) else None
    return f"got {misfit.got}, expected {meant or 'true or false'}"


def _text(misfit: _Misfit) -> str:
    value = misfit.error["input"]
    if isinstance(value, (int, float)):
        raw = misfit.document.plain.get(misfit.path, str(value))
        return f'got {misfit.got}, expected text; write it in quotes: "{one_line(raw)}"'
    return f"got {misfit.got}, expected text"


def _list(misfit: _Misfit) -> str:
    value = misfit.error["input"]
    example = f": [{one_line(value)}]" if isinstance(value, str) else " in square brackets"
    return f"got {misfit.got}, expected a list{example}"


def _choice(misfit: _Misfit) -> str:
    expected = str(misfit.error["ctx"]["expected"]).replace("'", "`")
    return f"got {misfit.got}, expected {expected}"


def _pattern(misfit: _Misfit) -> str:
    if isinstance(misfit.path[-1], int):
        return f"got {misfit.got}, expected layer/datatype such as 31/0"
    small = "small letters, digits and `_`, a letter first"
    return f"got {misfit.got}, expected a name of {small}"


def _bound(words: str, key: str) -> Callable[[_Misfit], str]:
    def say(misfit: _Misfit) -> str:
        bound = misfit.error["ctx"][key]
        return f"out of range, expected {words} {bound:g}, got {misfit.error['input']:g}"

    return say


def _empty(misfit: _Misfit) -> str:
    least = {1: "one", 2: "two"}[misfit.error["ctx"]["min_length"]]
    return f"got {misfit.got} without entries, expected at least {least}"


def _as_it_is(misfit: _Misfit) -> str:
    return misfit.error["msg"]


_WORDING: Mapping[str, Callable[[_Misfit], str]] = {
    "float_type": _number,
    "finite_number": lambda misfit: f"got {misfit.got}, expected a finite number",
    "model_type": _quantity_or_mapping,
    "model_attributes_type": _quantity_or_mapping,
    "dict_type": lambda misfit: f"got {misfit.got}, expected a mapping of names",
    "bool_type": _boolean,
    "string_type": _text,
    "string_unicode": lambda misfit: f"got {misfit.got}, expected valid characters",
    "tuple_type": _list,
    "too_short": _empty,
    "literal_error": _choice,
    "string_pattern_mismatch": _pattern,
    "greater_than": _bound("more than", "gt"),
    "greater_than_equal": _bound("at least", "ge"),
    "less_than_equal": _bound("at most", "le"),
}
