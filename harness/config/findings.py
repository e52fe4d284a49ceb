"""Problems of one file, gathered all at once and each given its line."""

from __future__ import annotations

import difflib
import json
import tomllib
from typing import TYPE_CHECKING, Any

from pydantic import ValidationError

from harness.config.toml_lines import line_map, line_of
from harness.errors import ConfigurationError

if TYPE_CHECKING:
    from collections.abc import Iterable

    from pydantic import BaseModel
    from pydantic_core import ErrorDetails

FORMAT = 1  # of rig and trial files; raised when a file of the old form would be misread

_LONGEST_SHOWN = 60  # characters of a value in a message


class Findings:
    """Gathers the problems of one file.

    Parameters
    ----------
    name : str
        Name of the file, as the person gave it.
    lines : dict of str to int
        Line of each path [-].
    """

    def __init__(self, name: str, lines: dict[str, int]) -> None:
        self.name = name
        self._lines = lines
        self._found: list[tuple[int, str]] = []

    def add(self, path: str, text: str) -> None:
        """Note a problem at a path.

        Parameters
        ----------
        path : str
            Path of the key, e.g. ``"loop[0].scan"``; empty for the file as a whole.
        text : str
            What, the value and the rule.
        """
        line = line_of(self._lines, path)
        place = f"{path}: " if path else ""
        self._found.append((line, f"{self.name}:{line}: {place}{text}"))

    def raise_any(self) -> None:
        """Raise all problems in the order of their lines, if there are any.

        Raises
        ------
        ConfigurationError
            With every problem.
        """
        if self._found:
            in_order = sorted(self._found, key=lambda problem: problem[0])
            raise ConfigurationError(tuple(dict.fromkeys(text for _, text in in_order)))


class Entry:
    """One table of the file: what is written there, and what of it is right.

    Parameters
    ----------
    path : str
        Path of the table, e.g. ``"vessel[0]"``.
    raw : dict
        As written.
    model : type
        Pydantic model of the table.
    findings : Findings
        Takes the problems.
    """

    def __init__(
        self, path: str, raw: dict[str, Any], model: type[BaseModel], findings: Findings
    ) -> None:
        self.path = path
        self.raw = raw
        self.model = model
        self.parsed: BaseModel | None = None
        self._findings = findings
        self._values: dict[str, Any] = {}
        self._validate()

    def _validate(self) -> None:
        try:
            self.parsed = self.model.model_validate(self.raw)
            self._values = dict(self.parsed)
        except ValidationError as error:
            details = error.errors(include_url=False)
            for detail in details:
                where = "".join(_step(part) for part in detail["loc"])
                self._findings.add(self.path + where, _words(detail, self.raw, self.model))
            self._keep_sound_fields({detail["loc"][0] for detail in details})

    def _keep_sound_fields(self, bad: set[int | str]) -> None:
        """Validate the fields without a problem one by one, so that checks can go on."""
        draft = self.model.model_construct()
        for name, field in self.model.model_fields.items():
            key = field.alias or name
            if key in self.raw and key not in bad:
                setattr(draft, name, self.raw[key])
                self._values[name] = getattr(draft, name)
            elif key not in self.raw and not field.is_required():
                self._values[name] = field.get_default(call_default_factory=True)

    def get(self, name: str) -> Any:
        """Return the validated value of a field, or None when it is absent or wrong."""
        return self._values.get(name)

    def text(self, name: str) -> str | None:
        """Return the validated text of a field, or None when it is absent or wrong."""
        value = self._values.get(name)
        return value if isinstance(value, str) else None

    def number(self, name: str) -> float | None:
        """Return the validated number of a field, or None when it is absent or wrong."""
        value = self._values.get(name)
        return value if isinstance(value, (int, float)) else None

    def pair(self, name: str) -> tuple[float, float] | None:
        """Return the validated two numbers of a field, or None when they are not there."""
        value = self._values.get(name)
        return (value[0], value[1]) if isinstance(value, list) else None

    def shown(self, key: str) -> str:
        """Return what is written at a key, as for a message."""
        return show(self.raw.get(key))

    def problem(self, key: str, text: str) -> None:
        """Note a problem at a key of this table.

        Parameters
        ----------
        key : str
            Key as written in the file; empty for the table as a whole.
        text : str
            What, the value and the rule.
        """
        self._findings.add(f"{self.path}.{key}" if key else self.path, text)


def read_document(text: str, name: str) -> tuple[dict[str, Any], Findings]:
    """Parse a TOML text of the present format.

    Parameters
    ----------
    text : str
        The text.
    name : str
        Name of the file, for messages.

    Returns
    -------
    document : dict
        The tables.
    findings : Findings
        Empty, knowing the lines.

    Raises
    ------
    ConfigurationError
        When it is no TOML, or of another format.
    """
    try:
        document = tomllib.loads(text)
        findings = Findings(name, line_map(text))
    except tomllib.TOMLDecodeError as error:
        raise ConfigurationError((_syntax(error, text, name),)) from error
    except RecursionError as error:
        problem = f"{name}:1: brackets are nested too deeply to be a rig or a trial"
        raise ConfigurationError((problem,)) from error
    found = document.pop("format", None)
    if found is None:
        findings.add("format", f"is missing; write format = {FORMAT} as the first line")
    elif found != FORMAT or isinstance(found, (bool, float)):
        findings.add("format", f"{show(found)} is not a format known here; it must be {FORMAT}")
        findings.raise_any()
    return document, findings


def tables(document: dict[str, Any], name: str, findings: Findings) -> list[dict[str, Any]]:
    """Return the tables of an array of tables; what is not a table is a problem.

    Parameters
    ----------
    document : dict
        The file.
    name : str
        Name of the array, e.g. ``"vessel"``.
    findings : Findings
        Takes the problems.

    Returns
    -------
    list of dict
        The tables, with an empty one in place of what is no table.
    """
    array = document.get(name, [])
    if not isinstance(array, list) or not all(isinstance(each, dict) for each in array):
        findings.add(name, f"must be written as [[{name}]], once for each")
        return []
    return array


def single_table(document: dict[str, Any], name: str, findings: Findings) -> dict[str, Any]:
    """Return a table that a file has once; what is not a table is a problem.

    Parameters
    ----------
    document : dict
        The file.
    name : str
        Name of the table, e.g. ``"rig"``.
    findings : Findings
        Takes the problems.

    Returns
    -------
    dict
        The table, empty when it is not there.
    """
    table = document.get(name, {})
    if not isinstance(table, dict):
        findings.add(name, f"must be written as a table, [{name}]")
        return {}
    return table


def unknown_keys(document: dict[str, Any], known: Iterable[str], findings: Findings) -> None:
    """Note each key at the top of a file that has no meaning there.

    Parameters
    ----------
    document : dict
        The file.
    known : iterable of str
        Keys that have a meaning.
    findings : Findings
        Takes the problems.
    """
    known = tuple(known)
    for key in document:
        if key not in known:
            findings.add(key, _unknown_key(key, known, "of the file"))


def show(value: object) -> str:
    """Return a value of the file as it would be written there, shortened.

    Parameters
    ----------
    value : object
        The value.

    Returns
    -------
    str
        E.g. ``"LT-103"`` with its quotes.
    """
    if isinstance(value, bool):
        return "true" if value else "false"
    if isinstance(value, float):
        return repr(value)
    try:
        text = json.dumps(value, ensure_ascii=False)
    except TypeError:  # a date or a time
        text = str(value)
    return text if len(text) <= _LONGEST_SHOWN else text[: _LONGEST_SHOWN - 3] + "..."


def not_one_of(value: str, choices: Iterable[str], whose: str, what: str) -> str:
    """Return the words for a name that is not among those there are, nearest first.

    Parameters
    ----------
    value : str
        The name.
    choices : iterable of str
        Names that there are.
    whose, what : str
        E.g. ``"this rig"`` and ``"transmitter"``.

    Returns
    -------
    str
        One sentence.
    """
    names = list(choices)
    if not names:
        return f"{show(value)} is not a {what} of {whose}; it has none"
    near = difflib.get_close_matches(value, names, n=len(names), cutoff=0.5)
    ordered = near + [name for name in names if name not in near]
    listed = ", ".join(ordered[:8]) + (", ..." if len(ordered) > 8 else "")  # noqa: PLR2004
    return f"{show(value)} is not a {what} of {whose}; it has {listed}"


def _unknown_key(key: str, known: Iterable[str], where: str) -> str:
    near = difflib.get_close_matches(key, list(known), n=1)
    hint = f'; did you mean "{near[0]}"?' if near else f"; keys are {', '.join(known)}"
    return f"is not a key {where}{hint}"


def _step(part: int | str) -> str:
    return f"[{part}]" if isinstance(part, int) else f".{part}"


def _written(detail: ErrorDetails, raw: Any) -> Any:
    value = raw
    for part in detail["loc"]:
        value = value[part]
    return value


def _words(detail: ErrorDetails, raw: dict[str, Any], model: type[BaseModel]) -> str:
    """Return a problem found by pydantic in our words: the value and the rule."""
    kind, context = detail["type"], detail.get("ctx", {})
    if kind == "missing":
        return "is missing"
    if kind == "extra_forbidden":
        keys = [field.alias or name for name, field in model.model_fields.items()]
        return _unknown_key(str(detail["loc"][-1]), keys, "here")
    rules = {
        "value_error": "{error}",
        "literal_error": "must be {expected}",
        "string_type": "must be text in quotes",
        "float_type": "must be a plain number",
        "int_type": "must be a whole number",
        "bool_type": "must be true or false",
        "list_type": "must be a list in square brackets",
        "dict_type": "must be a table in braces, {{ key = value }}",
        "model_type": "must be a table",
        "finite_number": "must be a finite number",
        "greater_than": "must be above {gt}",
        "greater_than_equal": "must be at least {ge}",
        "less_than": "must be below {lt}",
        "less_than_equal": "must be at most {le}",
        "too_short": "must have {min_length} or more elements",
        "too_long": "must have {max_length} or fewer elements",
        "string_too_short": "must not be empty",
    }
    if kind == "literal_error":
        context = {"expected": context["expected"].replace("'", '"')}
    rule = rules[kind].format(**context) if kind in rules else detail["msg"]
    return f"{show(_written(detail, raw))} {rule}"


def _syntax(error: tomllib.TOMLDecodeError, text: str, name: str) -> str:
    """Return a syntax error with its line in front."""
    message, _, place = str(error).partition(" (at ")
    words = place.rstrip(")").replace(",", "").split()
    if len(words) == 4 and words[0] == "line":  # noqa: PLR2004  "line 3 column 5"
        return f"{name}:{words[1]}: column {words[3]}: not valid TOML: {message}"
    return f"{name}:{text.count(chr(10)) + 1}: not valid TOML: {message} at the end of the file"
