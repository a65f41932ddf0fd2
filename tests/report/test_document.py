"""The report as JSON, against the schema that ships with it; the validator is jsonschema, an independent library."""

from __future__ import annotations

import json
import math
from typing import Any

import jsonschema
import msgspec
import numpy as np
import pytest
import samples
from msgspec.structs import replace

from decode.judgement.records import Finding, Report
from decode.report.document import SCHEMA_FILE, report_schema, schema_text, to_json


def validate(document: Any) -> None:
    jsonschema.validate(document, report_schema(), jsonschema.Draft202012Validator)


def parsed(report: Report) -> Any:
    """The report's JSON, parsed with NaN and Infinity refused (RFC 8259, section 6: they are not permitted)."""

    def refuse(word: str) -> float:
        raise AssertionError(f"{word} is no JSON")

    return json.loads(to_json(report), parse_constant=refuse)


def test_the_shipped_schema_is_the_generated_one() -> None:
    """After a change of the records, `python -m decode.report.document` writes the file anew."""
    assert SCHEMA_FILE.read_text(encoding="utf-8") == schema_text()


def test_the_schema_is_a_schema() -> None:
    jsonschema.Draft202012Validator.check_schema(report_schema())


@pytest.mark.parametrize("name", samples.ALL)
def test_a_report_keeps_everything_and_fits_the_schema(name: str) -> None:
    report = samples.ALL[name]
    validate(parsed(report))
    assert msgspec.json.decode(to_json(report), type=Report) == report


def test_the_keys_are_those_of_the_contract() -> None:
    """The contract's keys, part by part, in its order; `totals` and two notes on the latency stand besides."""
    document = parsed(samples.SICK)
    expected = {
        "capture": "file layout rows duration_s tick_s lines notes",
        "serial": "interface frames good faulty missing error_rate error_rate_upper_95",
        "incremental": "edges net_counts counts_per_turn turns_seen illegal index_pulses totals",
        "agreement": "frames_used direction counts_per_turn offset_counts latency_s latency_uncertainty_s latency_note "
        "residual_rms_deg residual_peak_deg steps",
        "provenance": "version sheet capture_digest command",
    }
    assert list(document) == [
        "schema",
        *("capture", "serial", "incremental", "agreement", "measurements", "findings", "diagnosis", "next_capture"),
        *("verdict", "provenance"),
    ]
    for part, keys in expected.items():
        assert list(document[part]) == keys.split()
    names = "name line unit n min median mean max std uncertainty limit verdict reason"
    assert list(document["measurements"][0]) == names.split()
    assert list(document["measurements"][0]["limit"]) == ["min", "max", "source"]
    finding_keys = "kind severity time_s frame line cause detail evidence"
    assert list(document["findings"][0]) == finding_keys.split()
    assert list(document["agreement"]["steps"][0]) == ["time_s", "counts"]
    diagnosis_keys = "case sentence origin confidence evidence findings instead_of"
    assert list(parsed(samples.UNPLUGGED)["diagnosis"][0]) == diagnosis_keys.split()


def test_what_is_not_finite_becomes_null() -> None:
    """Also inside evidence, where numpy's numbers and arrays stand."""
    evidence = {"nan": math.nan, "numpy": np.float64("inf"), "count": np.int64(3), "words": np.array([1.5, np.nan])}
    finding = Finding(kind="glitch", severity="fault", time_s=0.0, evidence=evidence)
    odd = replace(samples.MEASUREMENTS[0], mean=math.nan, std=math.inf)
    document = parsed(replace(samples.GOOD, findings=[finding], measurements=[odd]))
    assert document["findings"][0]["evidence"] == {"nan": None, "numpy": None, "count": 3, "words": [1.5, None]}
    assert document["measurements"][0]["mean"] is None
    assert document["measurements"][0]["std"] is None
    validate(document)


def test_evidence_that_json_cannot_hold_is_refused() -> None:
    finding = Finding(kind="glitch", severity="fault", time_s=0.0, evidence={"odd": object()})
    with pytest.raises(TypeError, match="object has no place in a report"):
        to_json(replace(samples.GOOD, findings=[finding]))


def _set(document: Any, path: str, value: Any) -> None:
    *steps, last = [int(step) if step.isdigit() else step for step in path.split(".")]
    for step in steps:
        document = document[step]
    document[last] = value


@pytest.mark.parametrize(
    ("path", "value"),
    [
        ("schema", "shaftproof.report/2"),
        ("verdict", "maybe"),
        ("extra", 1),
        ("capture.extra", 1),
        ("capture.tick_s", 0),
        ("capture.rows", -1),
        ("capture.lines.cs", "CS"),
        ("serial.interface", "uart"),
        ("serial.error_rate", 1.5),
        ("incremental.turns_seen", -1),
        ("agreement.direction", 0),
        ("agreement.residual_rms_deg", -0.1),
        ("measurements.0.name", "clock_frequency"),
        ("measurements.0.unit", "MHz"),
        ("measurements.0.verdict", "PASS"),
        ("measurements.0.limit.source", None),
        ("findings.0.kind", "crc_error"),
        ("findings.0.severity", "error"),
        ("findings.0.time_s", None),
        ("findings.0.frame", -1),
    ],
)
def test_the_schema_refuses(path: str, value: Any) -> None:
    document = parsed(samples.SICK)
    _set(document, path, value)
    with pytest.raises(jsonschema.ValidationError):
        validate(document)


@pytest.mark.parametrize("key", ["schema", "diagnosis", "next_capture"])
def test_the_schema_asks_for_every_key(key: str) -> None:
    document = parsed(samples.GOOD)
    del document[key]
    with pytest.raises(jsonschema.ValidationError):
        validate(document)
