"""Completion scripts for shells, written from the parsers that also parse: they cannot fall behind."""

from __future__ import annotations

import argparse
import importlib
from collections.abc import Mapping, Sequence
from dataclasses import dataclass
from typing import Any

SHELLS = ("bash", "zsh")

# What a value is, by its metavar; what is not here cannot be guessed.
_FILES = ("FILE", "NEWFILE", "CAPTURE", "SOURCE")
_SHEETS = ("SHEET",)


@dataclass(frozen=True)
class _Value:
    """What a word may be: "file", "toml" or "" (cannot be guessed), or one of some words."""

    name: str
    kind: str = ""
    words: tuple[str, ...] = ()


@dataclass(frozen=True)
class _Option:
    names: tuple[str, ...]
    says: str
    value: _Value | None


@dataclass(frozen=True)
class _Command:
    says: str
    options: tuple[_Option, ...]
    place: _Value | None
    is_many: bool = False


class Action(argparse.Action):
    """Prints the script and ends."""

    def __call__(self, parser: argparse.ArgumentParser, _: object, shell: Any, *rest: object) -> None:
        print(script(shell), end="")
        parser.exit()


def script(shell: str) -> str:
    """The completion script for a shell, one of :data:`SHELLS`."""
    return {"bash": _bash, "zsh": _zsh}[shell](_commands())


def _commands() -> dict[str, _Command]:
    """Every command by name; the main job's is ""."""
    from benchfit.commands.main import COMMANDS, MAIN
    from benchfit.commands.options import Parser

    found = {}
    for name, (module, says) in {"": (MAIN, ""), **COMMANDS}.items():
        parser = Parser(prog="benchfit")
        importlib.import_module(module).add_arguments(parser)
        options = tuple(_option(a) for a in parser._actions if a.option_strings)
        place = next((a for a in parser._actions if not a.option_strings), None)
        found[name] = _Command(
            says, options, None if place is None else _place(name, place),
            is_many=place is not None and place.nargs == "*",
        )  # fmt: skip
    return found


def _option(action: argparse.Action) -> _Option:
    says = (action.help or "").replace("%%", "%")
    value = None if action.nargs == 0 else _value(action)
    return _Option(tuple(action.option_strings), says, value)


def _value(action: argparse.Action) -> _Value:
    metavar = action.metavar[-1] if isinstance(action.metavar, tuple) else action.metavar
    name = metavar or action.dest
    if action.choices is not None:
        return _Value(name, words=tuple(map(str, action.choices)))
    return _Value(name, "file" if name in _FILES else "toml" if name in _SHEETS else "")


def _place(command: str, action: argparse.Action) -> _Value:
    from benchfit import circuits

    if command in ("circuits", "sheet"):
        return _Value("CIRCUIT", words=tuple(circuits.names()))
    return _value(action)


def _flags(commands: Mapping[str, _Command]) -> list[str]:
    """The options that may stand before a command's name."""
    from benchfit.commands.main import FLAGS

    known = {name for option in commands[""].options for name in option.names}
    return [flag for flag in FLAGS if flag in known]


# --- bash ---------------------------------------------------------------------------------------------------

_BASH = """\
# Completion of benchfit for bash. Load it with:  eval "$(benchfit --completion bash)"
_benchfit() {{
    local current="${{COMP_WORDS[COMP_CWORD]}}" before="${{COMP_WORDS[COMP_CWORD-1]}}" command="" place=1 word
    for word in "${{COMP_WORDS[@]:1:COMP_CWORD-1}}"; do
        case "$word" in
            {flags}) ;;
            {commands}) command="$word"; place=0; break ;;
            *) place=0; break ;;
        esac
    done
    local kind="" words="" options=""
    case "$command $before" in
{values}
        *)
            case "$command" in
{places}
            esac
            if [[ $current == -* ]]; then kind="words"; words="$options"; fi
            ;;
    esac
    local IFS=$'\\n'
    COMPREPLY=()
    case "$kind" in
        words) IFS=$' \\n'; COMPREPLY=( $(compgen -W "$words" -- "$current") ) ;;
        file|toml)
            compopt -o filenames 2>/dev/null
            if [[ $kind == toml ]]; then
                COMPREPLY=( $(compgen -f -X '!*.toml' -- "$current") $(compgen -d -- "$current") )
            else
                COMPREPLY=( $(compgen -f -- "$current") )
            fi
            if [[ $place == 1 && -n "$words" ]]; then
                IFS=$' \\n'
                COMPREPLY+=( $(compgen -W "$words" -- "$current") )
            fi
            ;;
    esac
}}
complete -F _benchfit benchfit
"""


def _bash(commands: Mapping[str, _Command]) -> str:
    names = [name for name in commands if name]
    taken: dict[str, list[str]] = {}
    places = []
    for name, command in commands.items():
        for option in command.options:
            if option.value is not None:
                words = [f'"{name} {word}"' for word in option.names]
                taken.setdefault(_bash_value(option.value), []).extend(words)
        known = " ".join(word for option in command.options for word in option.names)
        what = _bash_value(command.place) if command.place is not None else ":"
        if not name:
            what += f'; [[ $place == 1 ]] && words="{" ".join(names)}"'
        places.append(f'                "{name}") {what}; options="{known}" ;;')
    return _BASH.format(
        flags="|".join(_flags(commands)), commands="|".join(names), places="\n".join(places),
        values="\n".join(f"        {'|'.join(words)}) {value} ;;" for value, words in taken.items()),
    )  # fmt: skip


def _bash_value(value: _Value) -> str:
    if value.words:
        return f'kind="words"; words="{" ".join(value.words)}"'
    return f'kind="{value.kind}"'


# --- zsh ----------------------------------------------------------------------------------------------------

_ZSH = """\
#compdef benchfit
# Completion of benchfit for zsh. Load it after compinit with:  eval "$(benchfit --completion zsh)"
_benchfit() {{
    local command="" word
    local -a commands
    commands=(
{described}
    )
    for word in "${{(@)words[2,CURRENT-1]}}"; do
        case "$word" in
            {flags}) ;;
            {commands}) command="$word"; break ;;
            *) command="-"; break ;;
        esac
    done
    case "$command" in
        "")
            _describe -t commands command commands
            _arguments -s {main}
            ;;
        -)
            _arguments -s {main}
            ;;
{cases}
    esac
}}
if [[ "${{funcstack[1]}}" == _benchfit ]]; then
    _benchfit "$@"
else
    compdef _benchfit benchfit
fi
"""


def _zsh(commands: Mapping[str, _Command]) -> str:
    names = [name for name in commands if name]
    described = "\n".join(f"        {_quoted(f'{name}:{_plain(commands[name].says)}')}" for name in names)
    cases = []
    for name in names:
        lines = _joined(["':command: '", *_zsh_specs(commands[name])])
        cases.append(f"        {name})\n            _arguments -s {lines}\n            ;;")
    return _ZSH.format(
        described=described, flags="|".join(_flags(commands)), commands="|".join(names),
        main=_joined(_zsh_specs(commands[""])), cases="\n".join(cases),
    )  # fmt: skip


def _joined(specs: Sequence[str]) -> str:
    return "".join(f" \\\n                {spec}" for spec in specs).strip(" ")


def _zsh_specs(command: _Command) -> list[str]:
    """The command's words as _arguments wants them."""
    specs = []
    for option in command.options:
        tail = f"[{_plain(option.says)}]" + ("" if option.value is None else _zsh_value(option.value))
        # An option may be given again: some are meant to be, and for the others the last one counts.
        specs += [_quoted(f"*{name}{tail}") for name in option.names]
    if command.place is not None:
        specs.append(_quoted(f"{'*' if command.is_many else ''}{_zsh_value(command.place)}"))
    return specs


def _zsh_value(value: _Value) -> str:
    actions = {"file": "_files", "toml": '_files -g "*.toml"', "": " "}
    action = f"({' '.join(value.words)})" if value.words else actions[value.kind]
    return f":{_plain(value.name)}:{action}"


def _plain(text: str) -> str:
    """A description in which nothing has a meaning."""
    return "".join(f"\\{c}" if c in "[]:\\" else c for c in text)


def _quoted(text: str) -> str:
    return "'" + text.replace("'", "'\\''") + "'"

