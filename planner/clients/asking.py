"""What may be asked for all clients at once: what-ifs by address, stresses by name."""

from __future__ import annotations

import difflib
import re
from collections.abc import Callable, Sequence
from functools import partial
from typing import NoReturn, TypeAlias

from planner.diagnostics import Diagnostic, InputError
from planner.household import Household
from planner.scenarios import parse_change
from planner.stresses import STRESSES, fall_at_the_start

Change: TypeAlias = tuple[str, tuple[tuple[str, str], ...]]
"""A name and its (address, value) pairs."""

_FALL = re.compile(r"(?:savings |markets )?falls?(?: by)? (\d+(?:\.\d+)?) ?%(?: at the start)?")


def stress_called(text: str) -> tuple[str, Callable[[Household], Household | None]]:
    """Name and function of a stress: one of the standard ones, or a fall of any size.

    Parameters
    ----------
    text
        A standard stress's name, or words that only one of them has, or ``fall 30%``.

    Returns
    -------
    name, change
        `change` gives None where a household has no ground for it. The name leads to the same
        stress again.

    Raises
    ------
    InputError
        Code ``stress-unknown``.
    """
    plain = " ".join(text.casefold().split())
    fall = _FALL.fullmatch(plain)
    if fall is not None:
        by = float(fall[1]) / 100
        if not 0 < by < 1:
            _refuse(f"a fall is by more than 0 % and less than 100 %, not {fall[1]} %")
        return f"savings fall by {100 * by:g} % at the start", partial(fall_at_the_start, by=by)
    names = {name.casefold(): (name, change) for name, change in STRESSES}
    if plain in names:
        return names[plain]
    within = [name for name in names if plain and plain in name]
    if len(within) == 1:
        return names[within[0]]
    if within:
        _refuse(f"{text!r} may be any of {', '.join(repr(names[name][0]) for name in within)}")
    near = difflib.get_close_matches(plain, list(names), n=1)
    hint = (
        f"did you mean {names[near[0]][0]!r}?"
        if near
        else f"stresses are 'fall 30%' and {', '.join(repr(name) for name, _ in STRESSES)}"
    )
    _refuse(f"no stress is called {text!r}; {hint}")


def _refuse(message: str) -> NoReturn:
    raise InputError([Diagnostic("stress-unknown", "--stress", message)])


def asked_changes(texts: Sequence[str], *, together: bool) -> tuple[Change, ...]:
    """What-ifs as typed, ``ADDRESS=VALUE``: each by itself, or all as one.

    Raises
    ------
    InputError
        Every text that is no change.
    """
    parsed: dict[str, tuple[str, str]] = {}
    found: list[Diagnostic] = []
    for text in texts:
        try:
            parsed[text.strip()] = parse_change(text)
        except InputError as error:
            found.extend(error.diagnostics)
    if found:
        raise InputError(found)
    if together and parsed:
        return ((" and ".join(parsed), tuple(parsed.values())),)
    return tuple((name, (change,)) for name, change in parsed.items())


def asked_stresses(texts: Sequence[str]) -> tuple[str, ...]:
    """Return the names of the stresses asked for, each once.

    Raises
    ------
    InputError
        Every text that names none.
    """
    names: list[str] = []
    found: list[Diagnostic] = []
    for text in texts:
        try:
            names.append(stress_called(text)[0])
        except InputError as error:
            found.extend(error.diagnostics)
    if found:
        raise InputError(found)
    return tuple(dict.fromkeys(names))
