"""Settings of `fellwalk run` from a TOML file; what is typed as an option counts before the file."""

from __future__ import annotations

import argparse
import difflib
import tomllib
from collections.abc import Iterable
from typing import Any

import numpy as np

from fellwalk.errors import ArgumentError

__all__ = ["read_settings"]

_NOT_IN_FILES = {"help", "settings", "debug", "json"}


def read_settings(path: str, parser: argparse.ArgumentParser) -> dict[str, Any]:
    """Values by the names that `parser` stores them under, checked as options are.

    Keys of the file are the long options without their dashes in front, and the model; dashes and underlines are the
    same. Errors: ArgumentError with the file, the key and what was wrong.
    """
    try:
        with open(path, "rb") as file:
            given = tomllib.load(file)
    except OSError as error:
        raise ArgumentError(f"{path}: the settings cannot be read ({error.strerror})") from None
    except (tomllib.TOMLDecodeError, UnicodeDecodeError) as error:
        raise ArgumentError(f"{path}: this is not TOML: {error}") from None
    actions = {action.dest: action for action in parser._actions if action.dest not in _NOT_IN_FILES}
    found: dict[str, Any] = {}
    for key, value in given.items():
        name = key.replace("-", "_")
        if name not in actions:
            raise ArgumentError(f"{path}: there is no setting {key!r}{_meant(name, actions)}")
        if name in found:
            raise ArgumentError(f"{path}: the setting {key!r} is given twice, with a dash and with an underline")
        found[name] = _checked(f"{path}: {key}", actions[name], value)
    return found


def _meant(name: str, actions: Iterable[str]) -> str:
    near = difflib.get_close_matches(name, actions, n=1)
    if near:
        return f"; did you mean {near[0].replace('_', '-')}?"
    return f"; there are {', '.join(sorted(known.replace('_', '-') for known in actions))}"


def _checked(where: str, action: argparse.Action, value: Any) -> Any:
    if action.nargs == 0:
        if not isinstance(value, bool):
            raise ArgumentError(f"{where} must be true or false, not {value!r:.60}")
        return value
    if action.dest == "start" and isinstance(value, list):
        try:
            return np.array(value, dtype=np.float64)
        except (TypeError, ValueError):
            raise ArgumentError(f"{where} must be a list of numbers, or of one such list a chain, not "
                                f"{value!r:.60}") from None
    if isinstance(value, bool) or not isinstance(value, int | float | str):
        raise ArgumentError(f"{where} must be a number or a text, not {value!r:.60}")
    if action.type is None:
        if not isinstance(value, str):
            raise ArgumentError(f"{where} must be a text, not {value!r:.60}")
        converted: Any = value
    else:
        try:
            converted = action.type(str(value))  # type: ignore[operator]
        except (argparse.ArgumentTypeError, ValueError) as error:
            what = error if isinstance(error, argparse.ArgumentTypeError) else f"it must be a number, not {value!r}"
            raise ArgumentError(f"{where}: {what}") from None
    if action.choices is not None and converted not in action.choices:
        raise ArgumentError(f"{where} must be one of {', '.join(map(repr, action.choices))}, not {value!r:.60}")
    return converted
