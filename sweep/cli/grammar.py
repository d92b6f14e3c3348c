"""What the command line refuses: an empty value, one of two given for one, an unknown option.

A script that calls this program as a gate fills in shell variables, and one that is not set must
not make another question of it. So nothing that is given is ever passed over.
"""

from __future__ import annotations

import argparse
from collections.abc import Callable, Sequence
from typing import Any, NoReturn

from sweep.errors import InputError

_TIMES = "_times_given"
"""Where a namespace keeps how often each option that takes one value was given."""


class Parser(argparse.ArgumentParser):
    """A parser whose mistakes are errors of the program's own tree."""

    def add_argument(self, *names: str, **settings: Any) -> argparse.Action:  # noqa: ANN401
        """Declare an argument; one that takes a value refuses an empty one."""
        kind = settings.get("action", "store")
        if kind in _TAKES_A_VALUE:
            settings["action"] = _TAKES_A_VALUE[kind]
            if "type" in settings:
                shown = names[-1] if names[0].startswith("-") else settings.get("metavar", names[0])
                settings["type"] = _filled(settings["type"], shown, settings.get("metavar"))
        return super().add_argument(*names, **settings)

    def error(self, message: str) -> NoReturn:
        """Raise instead of printing a usage text and leaving."""
        raise InputError(
            f"reading the command line: {message}",
            where=[self.prog],
            remedy=f"see `{self.prog} --help`",
        )


def read_arguments(root: argparse.ArgumentParser, given: Sequence[str]) -> argparse.Namespace:
    """Read a command line.

    Raises
    ------
    InputError
        For what the grammar does not know, and for an option given twice that takes one value.
    """
    options, unknown = root.parse_known_args(given)
    prog = f"{root.prog} {options.command}" if options.command else root.prog
    if unknown:
        raise InputError(
            f"reading the command line: unrecognized arguments: {' '.join(unknown)}",
            where=[prog],
            remedy=f"see `{prog} --help`",
        )
    for name, times in getattr(options, _TIMES, {}).items():
        if times > 1:
            raise InputError(
                f"reading the command line: {name} is given {times} times; expected one value",
                where=[name],
                remedy=f"give {name} once",
            )
    return options


def flatten(values: Sequence[str], option: str) -> tuple[str, ...]:
    """Names given as ``--each a,b --each c``, one by one.

    Raises
    ------
    InputError
        For an empty name, and one that is given twice.

    Examples
    --------
    >>> flatten(["a,b", "c"], "--each")
    ('a', 'b', 'c')
    """
    names = [name.strip() for text in values for name in text.split(",")]
    for name in names:
        if not name:
            raise InputError(
                f"reading the command line: {option} {','.join(values)} holds an empty name",
                where=[option],
                remedy="put a name before and behind every comma",
            )
        if names.count(name) > 1:
            raise InputError(
                f"reading the command line: {option} names {name} {names.count(name)} times",
                where=[option],
                remedy=f"name {name} once",
            )
    return tuple(names)


class _One(argparse.Action):
    """Keeps a value, and counts how often one was given."""

    def __call__(
        self,
        parser: argparse.ArgumentParser,  # noqa: ARG002 - argparse's own signature
        namespace: argparse.Namespace,
        values: object,
        option_string: str | None = None,
    ) -> None:
        shown = option_string or str(self.metavar or self.dest)
        _refuse_empty(values, shown, self.metavar)
        times = dict(getattr(namespace, _TIMES, {}))
        if option_string:
            name = self.option_strings[-1]
            times[name] = times.get(name, 0) + 1
        setattr(namespace, _TIMES, times)
        setattr(namespace, self.dest, values)


class _Several(argparse.Action):
    """Keeps every value that is given."""

    def __call__(
        self,
        parser: argparse.ArgumentParser,  # noqa: ARG002 - argparse's own signature
        namespace: argparse.Namespace,
        values: object,
        option_string: str | None = None,
    ) -> None:
        _refuse_empty(values, option_string or self.dest, self.metavar)
        setattr(namespace, self.dest, [*getattr(namespace, self.dest), values])


_TAKES_A_VALUE: dict[str, type[argparse.Action]] = {"store": _One, "append": _Several}


def _filled(
    kind: Callable[[str], object], shown: str, metavar: str | None
) -> Callable[[str], object]:
    """A conversion that never sees an empty text, of which `Path` would make a folder."""

    def convert(text: str) -> object:
        _refuse_empty(text, shown, metavar)
        return kind(text)

    return convert


def _refuse_empty(value: object, shown: str, metavar: object) -> None:
    if not (isinstance(value, str) and not value.strip()):
        return
    is_option = shown.startswith("-")
    raise InputError(
        f"reading the command line: {shown} is empty; expected {metavar if is_option else 'a name'}"
        ", and found nothing",
        where=[shown],
        remedy=f"write {shown} {metavar}, or leave the option out; a shell variable may not be set"
        if is_option
        else f"write what {shown} is; a shell variable may not be set",
    )
