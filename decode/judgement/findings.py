"""Anomalies to findings: columns become sentences only here, ticks become seconds only here."""

from __future__ import annotations

from collections.abc import Iterable
from typing import Any

import numpy as np

from decode.anomalies import Anomalies
from decode.judgement.records import Finding
from decode.rules.kinds import KINDS


def findings_of(anomalies: Iterable[Anomalies], tick_s: float) -> list[Finding]:
    """Every occurrence as a finding, in order of time, then kind."""
    found = [finding for one in anomalies for finding in _each(one, tick_s)]
    return sorted(found, key=lambda finding: (finding.time_s, finding.kind))


def _each(anomalies: Anomalies, tick_s: float) -> Iterable[Finding]:
    kind = KINDS[anomalies.kind]
    names = list(anomalies.evidence)
    columns = [_in_seconds(name, anomalies.evidence[name], tick_s) for name in names]
    labels = [_label(name) for name in names]
    for row in range(len(anomalies)):
        evidence = {label: value for label, column in zip(labels, columns, strict=True) if _told(value := column[row])}
        yield Finding(
            kind=kind.name,
            severity=anomalies.severity or kind.severity,
            time_s=float(anomalies.times[row] * tick_s),
            frame=None if anomalies.frames is None else int(anomalies.frames[row]),
            line=anomalies.line,
            cause=None if anomalies.causes is None else anomalies.causes[row],
            detail=_detail(kind.meaning, evidence),
            evidence=evidence,
        )


def _label(name: str) -> str:
    return f"{name.removesuffix('_ticks')}_s" if name.endswith("_ticks") else name


def _in_seconds(name: str, column: Any, tick_s: float) -> list[Any]:
    values = column.tolist() if isinstance(column, np.ndarray) else list(column)
    if not name.endswith("_ticks"):
        return [value.item() if isinstance(value, np.generic) else value for value in values]
    return [None if value is None else float(value) * tick_s for value in values]


def _told(value: Any) -> bool:
    return value is not None and not (isinstance(value, float) and not np.isfinite(value))


def _detail(meaning: str, evidence: dict[str, Any]) -> str:
    """The evidence in words, or what the kind means where there is none."""
    told = [words for name, value in evidence.items() if (words := _words(name, value))]
    return ", ".join(told) or meaning


def _words(name: str, value: Any) -> str:
    if isinstance(value, bool):
        return name.replace("_", " ") if value else ""
    if isinstance(value, float) and name.endswith("_s"):
        return f"{name.removesuffix('_s').replace('_', ' ')} {_seconds(value)}"
    return f"{name.replace('_', ' ')} {f'{value:.6g}' if isinstance(value, float) else value}"


def _seconds(value: float) -> str:
    """Short times with a prefix, as they are spoken of; instants later than a second keep their digits."""
    for unit, size in (("s", 1.0), ("ms", 1e-3), ("us", 1e-6), ("ns", 1e-9)):
        if abs(value) >= size:
            return f"{value / size:.9g} {unit}"
    return f"{value / 1e-9:.3g} ns"
