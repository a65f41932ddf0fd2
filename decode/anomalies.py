"""What a machine found wrong, as columns.

A capture in which every frame is bad has as many anomalies as frames, so they stay arrays until a report shows
them. One `Anomalies` holds the occurrences of one kind; the judgement room turns them into findings.
"""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass, field
from typing import Any, Literal

import numpy as np

from decode.spans import IntArray

Severity = Literal["fault", "warning", "note"]


@dataclass(frozen=True, slots=True, eq=False)
class Anomalies:
    """Occurrences of one kind of finding.

    kind: a name of `decode.rules.kinds`.
    times: (n,) ticks.
    frames: (n,) index of the frame concerned, from 0, or None where no frame is.
    line: the line's column name, or None.
    causes: a plain sentence for each, or None where the bits do not say.
    evidence: further columns by name, each of length n.
    severity: None for the kind's own.
    """

    kind: str
    times: IntArray
    frames: IntArray | None = None
    line: str | None = None
    causes: Sequence[str | None] | None = None
    evidence: dict[str, Sequence[Any] | np.ndarray[Any, Any]] = field(default_factory=dict)
    severity: Severity | None = None

    def __len__(self) -> int:
        return int(self.times.size)
