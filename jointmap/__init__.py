"""Fuse the logs of a robot team into one reference that knows how good it is.

A reference is the batch answer to everything the robots logged: trajectories and landmarks in one
frame, with covariance and trust. It is not ground truth and not for navigation or construction.

Notes
-----
The public names load on first use, so that ``jointmap --help`` does not wait for the solver.
Some of them are functions named like the module that holds them (``jointmap.fuse`` lives in
``jointmap/fuse.py``). The function always wins as an attribute of the package, whatever was
imported before; the module is reached with ``from jointmap.fuse import ...``.
"""

from __future__ import annotations

import sys
from importlib import import_module
from types import ModuleType
from typing import TYPE_CHECKING, Any

if TYPE_CHECKING:
    from jointmap.fuse import fuse
    from jointmap.grade import grade
    from jointmap.ingest import read_survey
    from jointmap.products.files import read_reference, write_reference
    from jointmap.products.picture import draw_map
    from jointmap.products.reference import Reference
    from jointmap.settings import Settings
    from jointmap.simulate import simulate

__version__ = "0.1.0"

__all__ = [
    "Reference",
    "Settings",
    "__version__",
    "draw_map",
    "fuse",
    "grade",
    "read_reference",
    "read_survey",
    "simulate",
    "write_reference",
]

#: Module that holds each public name.
_HOMES = {
    "Reference": "jointmap.products.reference",
    "Settings": "jointmap.settings",
    "draw_map": "jointmap.products.picture",
    "fuse": "jointmap.fuse",
    "grade": "jointmap.grade",
    "read_reference": "jointmap.products.files",
    "read_survey": "jointmap.ingest",
    "simulate": "jointmap.simulate",
    "write_reference": "jointmap.products.files",
}


class _Package(ModuleType):
    """The package; a submodule never displaces the public function of the same name."""

    def __setattr__(self, name: str, value: object) -> None:
        # The import system binds every submodule as an attribute of its parent. The submodule
        # stays in sys.modules, which is all that `from jointmap.fuse import ...` needs.
        if name in _HOMES and isinstance(value, ModuleType):
            return
        super().__setattr__(name, value)


sys.modules[__name__].__class__ = _Package


def __getattr__(name: str) -> Any:
    if name not in _HOMES:
        raise AttributeError(f"module {__name__!r} has no attribute {name!r}")
    value = getattr(import_module(_HOMES[name]), name)
    globals()[name] = value
    return value


def __dir__() -> list[str]:
    return sorted({*globals(), *__all__})
