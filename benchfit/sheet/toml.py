"""The sheet's syntax: TOML in and out, dotted overrides, and where a key stands."""

from __future__ import annotations

import json
import re
import tomllib
from collections.abc import Iterable, Mapping, Sequence
from difflib import SequenceMatcher
from typing import Any, NoReturn

from benchfit.errors import SheetError

_BARE = re.compile(r"[A-Za-z0-9_-]+")


class Source:
    """The sheet's words as nested tables, and where each of them stands, for the sentence of an error."""

    def __init__(self, text: str, overrides: Sequence[str], path: str) -> None:
        self.path = path
        self._lines = text.splitlines()
        self._overridden: set[str] = set()
        try:
            self.table: dict[str, Any] = tomllib.loads(text)
        except tomllib.TOMLDecodeError as error:
            says = f"{self._name()}: this is not TOML: {_lowered(error)}"
            raise SheetError(says, path=path, key="") from None
        for override in overrides:
            self._override(override)

    def fail(self, key: str, says: str) -> NoReturn:
        """Refuse what stands at a dotted key."""
        raise SheetError(f"{self.place(key)}: {says}", path=self.path, key=key)

    def place(self, key: str) -> str:
        """File, line and key, or the override that the key comes from."""
        if any(key == o or key.startswith(f"{o}.") for o in self._overridden):
            return f"--set {key}"
        line = self._line(key)
        where = f"{self._name()}, line {line}" if line else self._name()
        return f"{where}, {key}" if key else where

    def _name(self) -> str:
        return self.path or "build sheet"

    def _line(self, key: str) -> int | None:
        section: list[str] = []
        best = None
        wanted = key.split(".")
        for number, line in enumerate(self._lines, 1):
            head = re.match(r"\s*\[+([^\]]+)\]", line)
            if head:
                section = _words(head[1])
                here = section
            else:
                entry = re.match(r"\s*([^=#]+?)\s*=", line)
                if not entry:
                    continue
                here = section + _words(entry[1])
            if here == wanted:
                return number
            if here == wanted[: len(here)]:
                best = number
        return best

    def _override(self, text: str) -> None:
        key, equals, value = text.partition("=")
        words = _words(key)
        if not equals or not all(words):
            says = f"--set {text}: write it as dotted.key=value, for instance --set parts.R=1M"
            raise SheetError(says, path=self.path, key=key)
        table = self.table
        for depth, word in enumerate(words[:-1], 1):
            if word not in table:
                self._overridden.add(".".join(words[:depth]))
            table = table.setdefault(word, {})
            if not isinstance(table, dict):
                says = f"--set {text}: {word} holds a value, it is no section"
                raise SheetError(says, path=self.path, key=key)
        is_text = words[0] in ("title", "circuit", "record") or "channels" in words
        table[words[-1]] = _value(value.strip(), is_text=is_text)
        self._overridden.add(".".join(words))


def nearest(word: str, known: Iterable[str]) -> str:
    """The known word that looks most like this one; "" where none is known."""

    def likeness(candidate: str) -> tuple[float, float]:
        folded = SequenceMatcher(None, word.casefold(), candidate.casefold()).ratio()
        return folded, SequenceMatcher(None, word, candidate).ratio()

    return max(sorted(known), key=likeness, default="")


def dump(table: Mapping[str, Any]) -> str:
    """Nested tables as TOML text."""
    return "\n".join(_section((), table)).strip() + "\n"


def _section(path: tuple[str, ...], table: Mapping[str, Any]) -> list[str]:
    plain = {k: v for k, v in table.items() if not isinstance(v, Mapping)}
    lines = []
    if path and (plain or not table):
        lines += ["", f"[{'.'.join(_key(word) for word in path)}]"]
    lines += [f"{_key(k)} = {_literal(v)}" for k, v in plain.items()]
    for key, value in table.items():
        if isinstance(value, Mapping):
            lines += _section((*path, str(key)), value)
    return lines


def _key(word: str) -> str:
    return word if _BARE.fullmatch(word) else _literal(word)


def _literal(value: Any) -> str:
    if isinstance(value, bool):
        return "true" if value else "false"
    if isinstance(value, str):
        # JSON's escapes are TOML's, but for DEL, which JSON leaves as it is.
        return json.dumps(value, ensure_ascii=False).replace("\x7f", "\\u007f")
    if isinstance(value, list):
        return f"[{', '.join(_literal(v) for v in value)}]"
    return repr(value) if isinstance(value, int | float) else str(value)


def _words(dotted: str) -> list[str]:
    """The words of a dotted key, quotes taken off."""
    return [word.strip().strip("\"'") for word in dotted.split(".")]


def _value(text: str, *, is_text: bool) -> Any:
    """What an override sets: a number, a truth value, a string or a table as in TOML, else the text.

    Where a text is expected, a bare number is that text as it was written: a channel may be named 1.
    """
    try:
        found = tomllib.loads(f"x = {text}")
    except tomllib.TOMLDecodeError:
        return text
    value = found["x"] if len(found) == 1 else text
    wanted = (str, dict) if is_text else (str, bool, int, float, dict)
    return value if isinstance(value, wanted) else text


def _lowered(error: Exception) -> str:
    text = str(error)
    return text[:1].lower() + text[1:]
