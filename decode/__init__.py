"""shaftproof: does a rotary encoder's interface do what its sheet says?

    import decode
    checked = decode.check("capture.csv", "board.toml")
    checked.report.verdict, checked.frames, checked.angles

The names below are the whole of it; every machine is usable alone from its own module. They are fetched when first
used, so that `import decode` costs nothing.
"""

from __future__ import annotations

from importlib import import_module
from typing import TYPE_CHECKING, Any

if TYPE_CHECKING:
    from decode.errors import InputError
    from decode.judgement.records import Report
    from decode.pipeline import Checked, check
    from decode.sheet import Sheet, load

_HOMES = {
    "Checked": "decode.pipeline",
    "InputError": "decode.errors",
    "Report": "decode.judgement.records",
    "Sheet": "decode.sheet",
    "check": "decode.pipeline",
    "load": "decode.sheet",
}

__all__ = ["Checked", "InputError", "Report", "Sheet", "check", "load"]


def __getattr__(name: str) -> Any:
    if name not in _HOMES:
        raise AttributeError(f"module {__name__!r} has no attribute {name!r}")
    return getattr(import_module(_HOMES[name]), name)
