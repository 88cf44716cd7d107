"""What is wrong with a study file, in its own words: table, key, what was expected, what was found, what to do."""

from __future__ import annotations

from collections.abc import Iterable, Mapping
from typing import Any, NoReturn

from inverse.errors import QuantityError, StudyError
from inverse.study.entries import found, near

MOST = 10
"""Problems reported at once."""


class Problems:
    """Collects problems of one file; the tenth, or `raise_any`, ends the reading."""

    def __init__(self, file: str) -> None:
        """Start with none."""
        self.file = file
        self.lines: list[str] = []

    def add(self, where: str, key: str, expected: str, what: str, hint: str = "") -> None:
        """Note one problem."""
        self.note(where, key, f"expected {expected}, found {what}" + (f"; {hint}" if hint else ""))

    def unread(self, where: str, key: str, error: QuantityError) -> None:
        """Note an entry that could not be read."""
        self.add(where, key, error.expected, error.found, error.hint)

    def unknown(self, where: str, key: str, noun: str, name: str, known: Iterable[str]) -> None:
        """Note a name that nothing has."""
        names = list(known)
        hint = near(name, names)
        if not hint:
            listed = ", ".join(names[:8]) + (", …" if len(names) > 8 else "")
            hint = f"there is {listed}" if names else "there is none"
        self.add(where, key, noun, found(name), hint)

    def note(self, where: str, key: str, sentence: str) -> None:
        """Note a problem in words of its own."""
        place = ", ".join(part for part in (where, f"`{key}`" if key else "") if part)
        line = f"{self.file}: {place}: {sentence}" if place else f"{self.file}: {sentence}"
        if line not in self.lines:
            self.lines.append(line)
        if len(self.lines) >= MOST:
            self.raise_any()

    def stop(self, sentence: str) -> NoReturn:
        """Note a problem of the file as a whole unless others are known, and raise."""
        if not self.lines:
            self.note("", "", sentence)
        raise StudyError("\n".join(self.lines))

    def raise_any(self) -> None:
        """Raise with all problems, if there are any."""
        if self.lines:
            raise StudyError("\n".join(self.lines))


def place_of(section: str, index: int, table: object) -> str:
    """How messages name a table of an array: by its name, else by its place counted from 1."""
    name = table.get("name") if isinstance(table, dict) else None
    if isinstance(name, str) and name and len(name) <= 60 and name.isprintable():
        return f'{section} "{name}"'
    return f"{section}[{index + 1}]"


def translate(errors: Iterable[Any], raw: Mapping[str, Any], problems: Problems) -> None:
    """Note what the validation found, in the file's own words."""
    for error in errors:
        where, key, tag = _place(error["loc"], raw)
        _note(error, where, key, tag, problems)


def _place(loc: tuple[Any, ...], raw: Mapping[str, Any]) -> tuple[str, str, tuple[str, str]]:
    """Table and key of an error, and the (section, kind) whose keys are known there."""
    from inverse.study.schema import ARRAYS, KINDS

    section, *rest = [part for part in loc if part != "[key]"] or [""]
    if section in ARRAYS and rest:
        table = raw[section][rest[0]]
        kind = str(rest[1]) if section in KINDS and len(rest) > 1 else ""
        keys = rest[2:] if kind else rest[1:]
        return place_of(section, rest[0], table), ".".join(map(_key, keys)), (section, kind)
    if section in ("variables", "stock") and rest:
        return f"{section}.{_key(rest[0])}", ".".join(map(_key, rest[1:])), (section, "")
    if section == "solve" and rest:
        return "solve", ".".join(map(_key, rest)), ("solve", "")
    return "", _key(section), ("", "")


def _key(part: object) -> str:
    """A key as far as it can be shown."""
    words = str(part)
    return words if len(words) <= 60 and words.isprintable() else found(words)


def _note(error: Any, where: str, key: str, tag: tuple[str, str], problems: Problems) -> None:
    from inverse.study.schema import ARRAYS, KINDS

    what, given = error["type"], error["input"]
    section = tag[0] or key
    match what:
        case "study":
            ctx = error["ctx"]
            own = ".".join(part for part in (key, ctx["key"]) if part)
            problems.add(where, own, ctx["expected"], ctx["found"], ctx["hint"])
        case "missing":
            problems.note(where, key, f"this key is missing: {_meaning(tag, key)}")
        case "extra_forbidden":
            _unknown_key(where, str(error["loc"][-1]), tag, problems)
        case "union_tag_invalid":
            kinds = list(KINDS[section])
            name = given["kind"] if isinstance(given, dict) else given
            listed = ", ".join(f'"{kind}"' for kind in kinds)
            problems.add(where, "kind", f"one of {listed}", found(name), near(name, kinds))
        case "union_tag_not_found":
            listed = ", ".join(f'"{kind}"' for kind in KINDS[section])
            problems.note(where, "kind", f"this key is missing: one of {listed}")
        case "list_type":
            hint = f"write [[{section}]] with double brackets" if isinstance(given, dict) else ""
            problems.add(where, key, f"tables [[{section}]]", found(given), hint)
        case _:
            hint = (
                f"write [{section}] with single brackets" if isinstance(given, list) and section not in ARRAYS else ""
            )
            problems.add(where, key, "a table", found(given), hint)


def _fields(tag: tuple[str, str]) -> Mapping[str, Any]:
    from inverse.study.schema import KINDS, PLAIN

    section, kind = tag
    table = KINDS[section][kind] if kind else PLAIN[section]
    return {field.alias or name: field for name, field in table.model_fields.items()}


def _meaning(tag: tuple[str, str], key: str) -> str:
    """What a missing key takes and means."""
    field = _fields(tag)[key]
    takes = [entry.json["description"] for entry in field.metadata if "description" in getattr(entry, "json", {})]
    return "; ".join([*takes, field.description or "it is required here"])


def _unknown_key(where: str, key: str, tag: tuple[str, str], problems: Problems) -> None:
    known = list(_fields(tag))
    hint = near(key, known) or f"the keys here are {', '.join(known)}"
    problems.add(where, "", "a key that is known here", found(key), hint)
