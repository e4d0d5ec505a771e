"""Reading TOML files whose every problem is to be told at once, by key, with what was found and what was expected.

- `read_toml`: the text and the table of a file
- `validate_table`: a table through a pydantic model, problems in our own words
- `near_miss`: the hint that follows an unknown name
"""

from __future__ import annotations

import difflib
import re
import tomllib
from collections.abc import Iterable, Iterator
from pathlib import Path
from typing import Any, NoReturn, TypeVar, get_args

from pydantic import BaseModel, ConfigDict, ValidationError

from elbowroom.base.errors import JobFileError
from elbowroom.base.inputs import read_input

Model = TypeVar("Model", bound=BaseModel)


class Table(BaseModel):
    """A TOML table: no key but those declared, no number taken from text, no infinity."""

    model_config = ConfigDict(extra="forbid", strict=True, frozen=True, allow_inf_nan=False)


def counted(count: int, noun: str) -> str:
    """Return ``1 problem``, ``2 problems``."""
    return f"{count} {noun}{'' if count == 1 else 's'}"


def _article(noun: str) -> str:
    return "an" if noun[:1] in "aeiou" else "a"


def near_miss(found: str, known: Iterable[str], what: str = "known") -> str:
    """Return ``did you mean 'this'?``, or the list of what is known."""
    names = list(known)
    folded = {name.casefold(): name for name in reversed(names)}
    close = difflib.get_close_matches(str(found).casefold(), folded, n=1, cutoff=0.6)
    if close:
        return f"did you mean {folded[close[0]]!r}?"
    if not names:
        return f"{what}: none"
    shown = ", ".join(names[:12]) + (", ..." if len(names) > 12 else "")
    return f"{what}: {shown}"


def fail(file: Path, what: str, problems: Iterable[str]) -> NoReturn:
    """Raise JobFileError with all problems of a file."""
    lines = tuple(problems)
    msg = f"not a usable {what}, {counted(len(lines), 'problem')}"
    raise JobFileError(msg, file=file, problems=lines)


def read_toml(path: str | Path, what: str) -> tuple[str, dict[str, Any]]:
    """Return the text and the table of a TOML file.

    Parameters
    ----------
    path : str or Path
        The file, UTF-8.
    what : str
        What the file should be, for messages: ``"job file"``.

    Raises
    ------
    JobFileError
        If the file is missing, a folder, unreadable, empty, not UTF-8 or not TOML; the last two name the line.
    """
    file = Path(path)
    try:
        data = read_input(file)
    except FileNotFoundError:
        try:
            siblings = [p.name for p in file.parent.iterdir() if p.is_file()]
        except OSError:
            siblings = []
        close = difflib.get_close_matches(file.name, siblings, n=1)
        msg = f"no such {what}" + (f"; did you mean {close[0]!r}?" if close else "")
        raise JobFileError(msg, file=file) from None
    except IsADirectoryError:
        msg = f"is a folder; {_article(what)} {what} expected"
        raise JobFileError(msg, file=file) from None
    except (OSError, ValueError) as cause:
        msg = f"cannot be read: {getattr(cause, 'strerror', None) or cause}"
        raise JobFileError(msg, file=file) from cause
    if not data.strip():
        msg = f"the file is empty; {_article(what)} {what} expected"
        raise JobFileError(msg, file=file)
    try:
        text = data.decode("utf-8-sig")
    except UnicodeDecodeError as cause:
        line = data[: cause.start].count(b"\n") + 1
        msg = f"not UTF-8 text (line {line}, byte 0x{data[cause.start]:02x}); save it as UTF-8"
        raise JobFileError(msg, file=file) from cause
    try:
        return text, tomllib.loads(text)
    except tomllib.TOMLDecodeError as cause:
        found = re.search(r"^(.*) \(at (?:line (\d+), column (\d+)|end of document)\)$", str(cause), re.DOTALL)
        reason = found[1] if found else str(cause)
        last = text.rstrip().count("\n") + 1
        place = f"line {found[2]}, column {found[3]}" if found and found[2] else f"line {last}, the last"
        number = int(found[2]) if found and found[2] else last
        shown = text.splitlines()[number - 1].strip()[:80] if text.splitlines()[number - 1 :] else ""
        msg = f"not TOML: {place}: {reason[:1].lower()}{reason[1:]}" + (f": {shown}" if shown else "")
        raise JobFileError(msg, file=file) from cause
    except (RecursionError, ValueError) as cause:
        # not faults of the grammar: brackets too deep for the parser, more digits than Python makes a number of
        deep = isinstance(cause, RecursionError)
        msg = "not usable TOML: " + ("brackets nested hundreds deep" if deep else "a number of thousands of digits")
        raise JobFileError(msg, file=file) from cause


def key_path(*parts: str | int) -> str:
    """Return a TOML key path; entries of arrays are counted from 0, as in Python."""
    path = ""
    for part in parts:
        if isinstance(part, int):
            path += f"[{part}]"
        else:
            bare = re.fullmatch(r"[A-Za-z0-9_-]+", part)
            path += ("." if path else "") + (part if bare else f'"{visible(part)}"')
    return path


def visible(text: str) -> str:
    """Return text with what no screen should be sent, line ends and control characters, escaped."""
    return "".join(c if c.isprintable() else c.encode("unicode_escape").decode("ascii") for c in text)


def shown(value: Any) -> str:
    """Return a value as TOML would write it, shortened."""
    if isinstance(value, bool):
        text = "true" if value else "false"
    elif isinstance(value, dict):
        text = "a table"
    elif isinstance(value, str):
        text = '"' + visible(value[:100]) + '"'
    elif isinstance(value, list):
        parts = ["[...]" if isinstance(v, list) else shown(v) for v in value[:6]] + ["..."] * (len(value) > 6)
        text = "[" + ", ".join(parts) + "]"
    else:
        text = str(value)
    return text if len(text) <= 60 else text[:57] + "..."


_EXPECTED = {
    "float_type": "a number",
    "int_type": "a whole number",
    "string_type": "text in quotes",
    "bool_type": "true or false",
    "list_type": "a list in [ ]",
    "dict_type": "a table",
    "model_type": "a table",
    "model_attributes_type": "a table",
    "finite_number": "a finite number",
}


def _sentence(error: Any, where: tuple[str | int, ...], known: Iterable[str]) -> str:
    kind, context, found = error["type"], error.get("ctx", {}), error["input"]
    path = key_path(*where, *(p for p in error["loc"]))
    if kind == "extra_forbidden":
        return f"{path}: unknown key; {near_miss(str(error['loc'][-1]), known, 'known keys')}"
    if kind == "missing":
        return f"{path}: required key is missing"
    if kind in ("value_error", "assertion_error"):
        return f"{path}: {context['error']}" if path else str(context["error"])
    if kind == "literal_error":
        allowed = re.findall(r"'([^']*)'", context["expected"])
        hint = near_miss(found, allowed, "expected") if isinstance(found, str) else f"expected: {', '.join(allowed)}"
        if hint.startswith("did"):
            hint = f"expected {' or '.join(f'{chr(34)}{a}{chr(34)}' for a in allowed)}; {hint}"
        return f"{path} = {shown(found)}: {hint}"
    limits = {
        "greater_than": "a number above {gt}",
        "greater_than_equal": "a number of at least {ge}",
        "less_than": "a number below {lt}",
        "less_than_equal": "a number of at most {le}",
        "string_too_short": "some text",
        "too_short": "at least {min_length} in the list",
        "too_long": "at most {max_length} in the list",
    }
    if kind in limits:
        return f"{path} = {shown(found)}: expected {limits[kind].format(**context)}"
    return f"{path} = {shown(found)}: expected {_EXPECTED.get(kind, error['msg'])}"


def _level(model: type[BaseModel], table: object, location: tuple[int | str, ...]) -> tuple[list[str], list[str]]:
    """Return the keys that a table within a table may have, and those that it has."""
    for step in location:
        if isinstance(step, int):
            table = table[step] if isinstance(table, list) else None
            continue
        model = next(_models_in(model.model_fields[step].annotation), model)
        table = table.get(step) if isinstance(table, dict) else None
    return list(model.model_fields), list(table) if isinstance(table, dict) else []


def _models_in(annotation: object) -> Iterator[type[BaseModel]]:
    """Yield the models that an annotation such as ``list[Model] | None`` mentions."""
    if isinstance(annotation, type) and issubclass(annotation, BaseModel):
        yield annotation
    for part in get_args(annotation):
        yield from _models_in(part)


def validate_table(
    model: type[Model],
    table: object,
    problems: list[str],
    where: tuple[str | int, ...] = (),
) -> Model | None:
    """Return a table as a model, or None after adding its problems to a list.

    Parameters
    ----------
    model : type
        A subclass of `Table`; validators raise ValueError with a text that says what was found and expected.
    table : object
        What the TOML file says there.
    problems : list of str
        Lengthened by one line for each problem.
    where : tuple, optional
        Key path of the table in its file; array entries as numbers.
    """
    if not isinstance(table, dict):
        bracket = f"[[{key_path(*where[:-1])}]]" if where and isinstance(where[-1], int) else f"[{key_path(*where)}]"
        problems.append(f"{key_path(*where)} = {shown(table)}: expected a table, written {bracket}")
        return None
    try:
        return model.model_validate(table)
    except ValidationError as cause:
        found = cause.errors(include_url=False)
        absent = {str(e["loc"][-1]) for e in found if e["type"] == "missing"}
        hinted: set[str] = set()
        lines = []
        for error in found:
            if error["type"] == "extra_forbidden":
                # a misspelt key is most likely one of those not given
                key = str(error["loc"][-1])
                fields, given = _level(model, table, error["loc"][:-1])
                free = [k for k in fields if k not in given]
                close = difflib.get_close_matches(key.casefold(), free, n=1)
                hinted.update(k for k in close if k in absent)
                lines.append(_sentence(error, where, free if close else fields))
        for error in found:
            if error["type"] == "extra_forbidden" or (error["type"] == "missing" and str(error["loc"][-1]) in hinted):
                continue
            lines.append(_sentence(error, where, ()))
        problems += lines
        return None
