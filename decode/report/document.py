"""The report as JSON, and the schema that says what such a file may hold.

The file is the report's records and nothing else, key by key. JSON has no word for what is not a number, so that
becomes null. The schema is generated from the same records and then tightened with what the records' types cannot
say: the names come from the tables of kinds, measurements and roles. The generated text is kept in the package as
report.schema.json, for those who read reports without this program; `python -m decode.report.document` writes it anew.
"""

from __future__ import annotations

import json
from pathlib import Path
from typing import Any, get_args

import msgspec
import numpy as np

from decode.judgement.records import SCHEMA, Report
from decode.rules.kinds import KINDS
from decode.rules.measurements import MEASUREMENTS
from decode.sheet import COMPLEMENTS, ROLES, Interface

SCHEMA_FILE = Path(__file__).with_name("report.schema.json")

_DIALECT = "https://json-schema.org/draft/2020-12/schema"


def to_json(report: Report) -> str:
    """The report as JSON text with a line feed at its end.

    Raises TypeError where the evidence holds what JSON cannot (a bug of ours).
    """
    packed = msgspec.json.encode(report, enc_hook=_plain)
    return msgspec.json.format(packed, indent=2).decode() + "\n"


def _plain(value: Any) -> Any:
    """numpy's numbers and arrays, as they stand in evidence, as Python's own."""
    if isinstance(value, np.generic):
        return value.item()
    if isinstance(value, np.ndarray):
        return value.tolist()
    raise TypeError(f"{type(value).__name__} has no place in a report")


def report_schema() -> dict[str, Any]:
    """The JSON Schema (draft 2020-12) of a report."""
    schema = msgspec.json.schema(Report)
    records: dict[str, Any] = schema["$defs"]
    for record in records.values():
        _close(record)
    _tighten(records)
    return {"$schema": _DIALECT, "$id": SCHEMA, "title": "A report of shaftproof", **schema}


def schema_text() -> str:
    """The text of report.schema.json."""
    return json.dumps(report_schema(), indent=2, ensure_ascii=False) + "\n"


def _close(record: dict[str, Any]) -> None:
    """Every key is always written, and no other is."""
    record["required"] = list(record["properties"])
    record["additionalProperties"] = False
    for field in record["properties"].values():
        field.pop("default", None)


def _tighten(records: dict[str, Any]) -> None:
    def field(record: str, name: str) -> dict[str, Any]:
        found: dict[str, Any] = records[record]["properties"][name]
        return found

    field("Report", "schema").update(const=SCHEMA)
    field("Finding", "kind").update(enum=sorted(KINDS))
    field("Measurement", "name").update(enum=sorted(MEASUREMENTS))
    field("Measurement", "unit").update(enum=sorted({definition.unit for definition in MEASUREMENTS.values()}))
    field("SerialRecord", "interface").update(enum=sorted(get_args(Interface)))
    field("CaptureRecord", "lines").update(propertyNames={"enum": [*ROLES, *COMPLEMENTS]})
    field("CaptureRecord", "tick_s").update(exclusiveMinimum=0)
    field("CaptureRecord", "duration_s").update(minimum=0)
    for record, names in _COUNTED.items():
        for name in names:
            field(record, name).update(minimum=0)
    field("Diagnosis", "findings")["items"].update(minimum=0)
    for name in ("error_rate", "error_rate_upper_95"):
        _number_of(field("SerialRecord", name)).update(minimum=0, maximum=1)
    for record, name in (
        ("Measurement", "uncertainty"),
        ("Measurement", "std"),
        ("AgreementRecord", "latency_uncertainty_s"),
        ("AgreementRecord", "residual_rms_deg"),
        ("AgreementRecord", "residual_peak_deg"),
    ):
        _number_of(field(record, name)).update(minimum=0)
    _number_of(field("Finding", "frame")).update(minimum=0)
    direction = field("AgreementRecord", "direction")
    direction.clear()
    direction.update(enum=[1, -1, None])


_COUNTED = {
    "CaptureRecord": ("rows",),
    "SerialRecord": ("frames", "good", "faulty", "missing"),
    "IncrementalRecord": ("edges", "turns_seen", "illegal", "index_pulses"),
    "AgreementRecord": ("frames_used",),
    "Measurement": ("n",),
}
"""What cannot be below none."""


def _number_of(field: dict[str, Any]) -> dict[str, Any]:
    """The numeric half of a field that is a number or null."""
    half: dict[str, Any] = next(part for part in field["anyOf"] if part["type"] in ("number", "integer"))
    return half


if __name__ == "__main__":
    SCHEMA_FILE.write_text(schema_text(), encoding="utf-8")
