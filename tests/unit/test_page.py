"""The page: everything in one file, nothing from anywhere, the cautions, and no text that can break out."""

import json
import re

import pytest

from rtctl.compare import compare
from rtctl.record.reader import Record, read_record
from rtctl.report.page import CAUTIONS, page, plotting_script
from tests.synthetic_record import InventedArm, Motion, motion_record

EVIL = '</script><script>alert(1)</script><b title="x">&'


@pytest.fixture(scope="module")
def records(tmp_path_factory: pytest.TempPathFactory) -> list[Record]:
    """Two short runs with another arm hash, one of them with names that try to be markup."""
    folder = tmp_path_factory.mktemp("page")
    plain = motion_record(folder / "plain.record", Motion(moving_s=0.3), terms={"plain": ("p", "d", "g")})
    arm = InventedArm(n=2, joint_names=(EVIL, "two"), hash="f" * 64, name=EVIL)
    evil = motion_record(
        folder / "evil.record", Motion(moving_s=0.3, stop_s=0.2, cause=10), terms={EVIL: (EVIL, "d", "g")}, arm=arm
    )
    return [read_record(plain), read_record(evil)]


def test_nothing_is_fetched(records: list[Record]) -> None:
    """No address of any host, no file beside the page, no request from a script."""
    text = page(records, compare(records), "report")
    assert re.findall(r"(?i)[a-z]+://[^\s\"']*", text) == []
    assert re.findall(r"(?i)\b(?:src|href|srcset|action|poster)\s*=\s*[\"'][^\"'#]", text) == []
    assert re.findall(r"@import|\burl\(|fetch\(|XMLHttpRequest|WebSocket|sendBeacon|importScripts|import\(", text) == []


def test_the_plotting_script_keeps_its_licence() -> None:
    """Copyright and permission notice stand in the page with the code they belong to."""
    code = plotting_script()
    assert "Copyright (c) 2022 Leon Sorokin" in code
    assert "Permission is hereby granted, free of charge" in code
    assert "var uPlot=" in code


def test_cautions_are_on_the_page(records: list[Record]) -> None:
    """Not a safety-rated control; hardware emergency stop; risk assessment, standards, codes, licensed practice."""
    text = page(records, compare(records), "report")
    for caution in CAUTIONS:
        assert caution.replace("'", "&#x27;") in text
    for phrase in (
        "not a safety-rated control",
        "hardware emergency stop",
        "risk assessment",
        "standards",
        "local codes",
        "licensed",
    ):
        assert phrase in " ".join(CAUTIONS)


def test_names_cannot_become_markup(records: list[Record]) -> None:
    """A joint, law or arm called like a script stays text, in tables and in data."""
    text = page(records, compare(records), "report")
    assert "<script>alert" not in text
    assert text.count("</script>") == text.count("<script") == 5


def test_the_data_in_the_page_is_what_json_gives(records: list[Record]) -> None:
    """Numbers that are saved from the page are those of the comparison."""
    comparison = compare(records)
    text = page(records, comparison, "stem")
    found = re.search(r'<script type="application/json" id="numbers" data-name="stem.json">(.*?)</script>', text, re.S)
    assert found is not None
    assert json.loads(found[1]) == json.loads(json.dumps(comparison.as_json()))


def test_identity_hashes_versions_stops_and_doubts_are_shown(records: list[Record]) -> None:
    """What ran, whether the records are whole, what stopped it, and what stands against the comparison."""
    text = page(records, compare(records), "report")
    for expected in (
        "plain.record",
        "f" * 16,
        records[0].seal[:16],
        "numpy " + records[0].header["versions"]["numpy"],
        "simulated arm",
        "the controller closed the run",
        "p + d + g",
        "speed (category 1)",
        "Not comparable: repeat the runs",
    ):
        assert expected in text, expected


def test_a_page_is_small_beside_its_data(records: list[Record]) -> None:
    """Script, style and text stay below 100 kB, so a report is as large as what it shows."""
    text = page(records, compare(records), "report")
    data = sum(len(part) for part in re.findall(r'<script type="[^"]*"[^>]*>.*?</script>', text, re.S))
    assert len(text) - data < 100_000
