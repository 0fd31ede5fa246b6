"""Options of ``jointmap simulate``, made from the fields of the settings."""

from __future__ import annotations

import argparse
from collections.abc import Callable
from dataclasses import fields
from typing import Any

from jointmap.simulate.settings import PRESETS, SimulationSettings


def add_arguments(parser: argparse.ArgumentParser) -> None:
    """Add one option for every field of the settings, and ``--errors`` for the preset.

    Options that are not given keep the value of the preset.
    """
    parser.add_argument(
        "--errors",
        choices=tuple(PRESETS),
        default="white",
        help="none; white noise only (default); or field: everything that real logs show",
    )
    defaults = SimulationSettings()
    for item in fields(SimulationSettings):
        default = getattr(defaults, item.name)
        option = "--" + item.name.replace("_", "-")
        text = f"{item.metadata['help']} (default: {_show(default)})".replace("%", "%%")
        if isinstance(default, bool):
            parser.add_argument(
                option,
                dest=item.name,
                action=argparse.BooleanOptionalAction,
                default=None,
                help=text,
            )
        elif isinstance(default, str):
            parser.add_argument(
                option, dest=item.name, choices=item.metadata["choices"], default=None, help=text
            )
        else:
            parser.add_argument(
                option,
                dest=item.name,
                type=_reader(default, names=item.metadata["low"] is None),
                default=None,
                metavar="LIST" if isinstance(default, tuple) else "N",
                help=text,
            )


def _show(value: Any) -> str:
    if isinstance(value, tuple):
        return ",".join(map(_show, value)) or "none"
    if isinstance(value, bool):
        return "yes" if value else "no"
    return f"{value:g}" if isinstance(value, float) else str(value)


def _reader(default: Any, *, names: bool) -> Callable[[str], Any]:
    """How a value of this kind is read: a number, a list of numbers, or a list of names."""
    if not isinstance(default, tuple):
        return type(default)
    kind: Callable[[str], Any] = str if names else float

    def values(text: str) -> tuple[Any, ...]:
        return tuple(kind(part.strip()) for part in text.split(",") if part.strip())

    values.__name__ = "list of names" if names else "list of numbers"
    return values


def settings_from(args: argparse.Namespace) -> SimulationSettings:
    """Settings from parsed arguments.

    Raises
    ------
    SettingsError
        If a value is outside its domain.
    """
    given = {
        item.name: getattr(args, item.name)
        for item in fields(SimulationSettings)
        if getattr(args, item.name) is not None
    }
    return SimulationSettings.preset(args.errors, **given)
