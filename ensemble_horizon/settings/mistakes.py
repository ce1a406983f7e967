"""Mistakes in a settings file, told with their keys, all of them at once."""

from __future__ import annotations

import difflib
import tomllib
from collections.abc import Callable, Sequence
from pathlib import Path
from typing import Any

from ensemble_horizon.errors import SettingsError

# From the place of an unknown key to the keys that are known there.
KnownKeys = Callable[[tuple[int | str, ...]], list[str]]


def read_toml(path: str | Path) -> tuple[dict[str, Any], str]:
    """Return the table in a TOML file, and its text.

    Raises
    ------
    SettingsError
        if the file cannot be read or is no TOML.
    """
    source = Path(path)
    try:
        text = source.read_text(encoding="utf-8-sig")
    except OSError as error:
        raise SettingsError(
            str(path),
            expected="a readable settings file",
            found=error.strerror or str(error),
            remedy="check the path; a sample stands in configs/",
        ) from error
    except UnicodeDecodeError as error:
        raise SettingsError(
            str(path),
            expected="a TOML settings file in UTF-8",
            found=f"a byte that is no text at position {error.start + 1}",
            remedy="check the path, or save the file as UTF-8",
        ) from error
    try:
        return tomllib.loads(text), text
    except tomllib.TOMLDecodeError as error:
        raise SettingsError(
            str(path), expected="TOML", found=str(error), remedy="correct that line"
        ) from error


def refuse_mistakes(name: str, mistakes: Sequence[str]) -> None:
    """Raise `SettingsError` with all ``mistakes``, each told once, if there are any."""
    told = list(dict.fromkeys(mistakes))
    if told:
        listing = "\n  ".join(told)
        raise SettingsError(
            name,
            expected="settings without mistakes",
            found=f"{len(told)}:\n  {listing}",
            remedy="correct it and run again" if len(told) == 1 else "correct them and run again",
        )


def mistake(item: Any, known_keys: KnownKeys) -> str:
    """Return one line for an error of the validation, beginning with the key."""
    key = key_of(item["loc"])
    if item["type"] == "extra_forbidden":
        known = known_keys(item["loc"])
        near = difflib.get_close_matches(str(item["loc"][-1]), known, n=1)
        hint = f"did you mean {near[0]!r}?" if near else f"known here: {', '.join(sorted(known))}"
        return f"{key}: unknown key; {hint}"
    if item["type"] == "missing":
        return f"{key}: missing"
    message = item["msg"].removeprefix("Value error, ")
    for phrase in ("Dictionary should have ", "Input should be ", "Tuple should have "):
        message = message.removeprefix(phrase)
    message = message.replace(" after validation", "")
    found = item["input"]
    if isinstance(found, str | int | float | bool):
        message += f"; found {found!r}"
    return f"{key}: {message}"


def key_of(loc: tuple[int | str, ...]) -> str:
    """Return a place of the settings as it is written: ``variables.wind.criteria[0]``."""
    text = ""
    for part in loc:
        if isinstance(part, int):
            text += f"[{part}]"
        elif part not in ("str", "int", "float", "tuple[str, ...]") and not part.startswith(
            ("literal[", "tuple[", "constrained-", "function-")
        ):
            text += f".{part}" if text else part
    return text
