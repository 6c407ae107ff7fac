"""The flat table: RFC 4180 as Python's csv module reads it, ISO 8601 times, no formulas."""

from __future__ import annotations

import csv
import io
from datetime import datetime

import pytest

from diag.errors import InputError
from diag.record.events import AnyEvent
from diag.record.table import COLUMNS, steps_csv
from tests.record.cases import (
    HOSTILE,
    NAME,
    START,
    found,
    head,
    hostile_case,
    loaded,
    numbered,
    worked_case,
)


def rows(events: list[AnyEvent], log: str = "case.jsonl") -> list[dict[str, str]]:
    return list(csv.DictReader(io.StringIO(steps_csv([(log, events)]), newline="")))


def test_every_step_has_its_row() -> None:
    events = worked_case()
    read = rows(events)
    assert list(read[0]) == list(COLUMNS)
    assert [int(row["number"]) for row in read] == list(range(len(events)))
    assert [row["event"] for row in read] == [event.event for event in events]
    by_number = {int(row["number"]): row for row in read}
    assert by_number[1] == {
        **by_number[1],
        "log": "case.jsonl", "circuit": NAME, "version": loaded(NAME).file.version,
        "engine": "E-17", "aircraft": "A-3", "by": "A. Fitter", "name": "oil_pressure",
        "point": "hot_idle", "value": "52psi", "complaint": "yes", "counts": "yes",
        "top_cause": "relief_valve.spring_weak", "top_probability": "0.4",
    }  # fmt: skip
    assert by_number[3]["counts"] == "no"
    assert by_number[5]["name"] == "oil_spectrum"
    assert by_number[6]["value"] == "open cowl; open line_ends"
    assert (by_number[9]["part_off"], by_number[9]["part_on"]) == ("PP-0412", "PP-0977")
    assert by_number[11]["name"] == "pressure_pump.worn"
    assert by_number[11]["remark"] == "verified by 10"


def test_times_are_iso_8601_with_their_zone() -> None:
    for row, event in zip(rows(worked_case()), worked_case(), strict=True):
        read = datetime.fromisoformat(row["at"])
        assert read == event.at
        assert read.utcoffset() == START.utcoffset()


def test_lines_end_as_the_standard_asks() -> None:
    """RFC 4180, section 2: records end with CR LF; quotes are doubled inside quotes."""
    text = steps_csv([("a", numbered([head(complaint='say "oil",\nthen go')]))])
    assert text.endswith("\r\n")
    assert '"say ""oil"",\nthen go"' in text
    assert rows(numbered([head(complaint='say "oil",\nthen go')]))[0]["remark"].startswith("say ")


@pytest.mark.parametrize("text", ["=1+1", "+cmd|' /C calc'!A0", "-2+3", "@SUM(A1)", "\t=1", "--1"])
def test_text_is_no_formula(text: str) -> None:
    (_, row) = rows(numbered([head(), found("oil_look", text, remark=text, reference=text)]))
    assert row["remark"] == row["value"] == row["reference"] == f"'{text}"


@pytest.mark.parametrize("text", ["-5degC", "+0.3 bar", "-1.5e-3", "52psi", "low", "-12 °C"])
def test_readings_keep_their_sign(text: str) -> None:
    (_, row) = rows(numbered([head(), found("oil_temperature", text)]))
    assert row["value"] == text


def test_hostile_text_stays_in_its_cell() -> None:
    read = rows(hostile_case())
    assert len(read) == len(hostile_case())
    assert read[1]["remark"] == HOSTILE
    assert read[0]["engine"] == HOSTILE


def test_several_cases_stand_in_one_table() -> None:
    text = steps_csv([("a.jsonl", worked_case()), ("b.jsonl", worked_case(closed=False))])
    read = list(csv.DictReader(io.StringIO(text, newline="")))
    assert {row["log"] for row in read} == {"a.jsonl", "b.jsonl"}
    assert text.count("log,circuit") == 1
    with pytest.raises(InputError, match="does not begin"):
        steps_csv([("a", [])])
