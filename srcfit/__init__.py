"""Recover the distributed source that drives a one-dimensional member from readings along it.

Names are loaded when first used, so that `import srcfit` stays fast.
"""

from __future__ import annotations

import importlib
import sys
from types import ModuleType
from typing import TYPE_CHECKING, Any

__version__ = "0.2.0"

if TYPE_CHECKING:
    from srcfit.case.load import load_case as load_case
    from srcfit.case.load import make_case as make_case
    from srcfit.case.member import make_member as make_member
    from srcfit.case.model import Case as Case
    from srcfit.compare import compare as compare
    from srcfit.comparison import Comparison as Comparison
    from srcfit.eigen import modes as modes
    from srcfit.kernel import kernel as kernel
    from srcfit.kernel import respond as respond
    from srcfit.member import Member as Member
    from srcfit.readings import read as read
    from srcfit.readings.model import Readings as Readings
    from srcfit.recover import recover as recover
    from srcfit.recovery import Recovery as Recovery

_FACE = {
    "load_case": "srcfit.case",
    "make_case": "srcfit.case",
    "make_member": "srcfit.case",
    "read": "srcfit.readings",
    "recover": "srcfit.recover",
    "compare": "srcfit.compare",
    "kernel": "srcfit.kernel",
    "modes": "srcfit.eigen",
    "respond": "srcfit.kernel",
    "Case": "srcfit.case.model",
    "Comparison": "srcfit.comparison",
    "Member": "srcfit.member",
    "Readings": "srcfit.readings.model",
    "Recovery": "srcfit.recovery",
}

__all__ = [
    "Case", "Comparison", "Member", "Readings", "Recovery", "compare", "kernel", "load_case",
    "make_case", "make_member", "modes", "read", "recover", "respond",
]  # fmt: skip


class _Face(ModuleType):
    """The package itself: loads names on first use.

    `compare`, `kernel` and `recover` are functions as well as modules. Importing such a module
    would put it in the function's place; here the function is put there instead.
    """

    def __getattr__(self, name: str) -> Any:
        if name == "sklearn":
            return importlib.import_module("srcfit.sklearn")
        if name not in _FACE:
            raise AttributeError(f"module 'srcfit' has no attribute {name!r}")
        found = getattr(importlib.import_module(_FACE[name]), name)
        super().__setattr__(name, found)
        return found

    def __setattr__(self, name: str, value: Any) -> None:
        if isinstance(value, ModuleType) and _FACE.get(name) == value.__name__:
            value = getattr(value, name)
        super().__setattr__(name, value)

    def __dir__(self) -> list[str]:
        return sorted({*super().__dir__(), *_FACE})


sys.modules[__name__].__class__ = _Face
