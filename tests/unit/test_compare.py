"""The numbers of a comparison against closed forms, and what is said when a comparison is not fair."""

import csv
import io
import json
from dataclasses import replace
from pathlib import Path

import numpy as np
import pytest

from rtctl.blocks import LIMITER_MAGNITUDE, LIMITER_RATE, MODE_BRAKING, MODE_LIVE, MODE_READY
from rtctl.compare import compare, counted_rows, measure, table_line
from rtctl.record.reader import Record, read_record
from tests.sources import source
from tests.synthetic_record import PERIOD_NS, InventedArm, Motion, make_record, motion_record

ROUNDING = 1e-12  # sums of a few thousand float64 terms
DT_S = PERIOD_NS / 1e9
READY, MOVING, AFTER = 50, 1000, 30  # rows
AMPLITUDE_RAD = 0.02


def sine_run(row: np.void, number: int) -> None:
    """Ready, one second of motion with a sine as error (whole periods), then braking. Torque 3 and 4 N m, constant."""
    k = number - READY
    moving = 0 <= k < MOVING
    row["cycle"] = number
    row["deadline_ns"] = 10**9 + number * PERIOD_NS
    row["now_ns"] = row["deadline_ns"] + 5000
    row["cost_ns"] = 20_000
    row["state_new"] = 0 if number in (10, READY + 5, READY + 6) else 1
    row["mode"] = MODE_READY if k < 0 else MODE_LIVE if moving else MODE_BRAKING
    row["stop"], row["first_cause"] = (0, 0) if k < MOVING else (2, 18)
    row["qd_ref"][:2] = 1.0 if moving else 0.0
    row["q_ref"][:2] = max(0, min(k, MOVING)) * DT_S
    row["q"][:2] = row["q_ref"][:2]
    row["q"][0] -= AMPLITUDE_RAD * np.sin(2 * np.pi * 4 * k * DT_S) if moving else 9.0
    row["tau_out"][:2] = (3.0, 4.0) if moving else (50.0, 50.0)
    row["limiters"][0] = LIMITER_MAGNITUDE if READY <= number < READY + 250 else 0
    row["limiters"][1] = LIMITER_RATE if READY + 250 <= number < READY + 350 else 0


@pytest.fixture(scope="module")
def record(tmp_path_factory: pytest.TempPathFactory) -> Record:
    """The record of the run above."""
    return read_record(make_record(tmp_path_factory.mktemp("sine") / "sine.record", sine_run, READY + MOVING + AFTER))


def test_rms_and_peak_of_a_sine_error(record: Record) -> None:
    """A sine of amplitude A over whole periods has RMS A / sqrt 2; two joints, one exact, halve the mean square."""
    metrics = measure(record)
    assert metrics.joints[0].rms_error == pytest.approx(AMPLITUDE_RAD / np.sqrt(2.0), rel=ROUNDING)
    assert metrics.joints[0].peak_error == pytest.approx(AMPLITUDE_RAD, rel=1e-3)  # 250 samples a period
    assert metrics.joints[1].rms_error == 0.0
    assert metrics.rms_error_rad == pytest.approx(AMPLITUDE_RAD / 2.0, rel=ROUNDING)
    assert metrics.peak_error_rad == metrics.joints[0].peak_error


def test_effort_of_a_constant_torque(record: Record) -> None:
    """3 and 4 N m for one second: 9 + 16 = 25 N^2 m^2 s; the torque of braking does not count."""
    metrics = measure(record)
    assert metrics.effort_nm2_s == pytest.approx(25.0 * MOVING * DT_S, rel=ROUNDING)
    assert [joint.effort for joint in metrics.joints] == pytest.approx([9.0, 16.0], rel=ROUNDING)
    assert metrics.counted_count == MOVING
    assert metrics.counted_s == pytest.approx(1.0, rel=ROUNDING)


def test_effort_holds_a_torque_until_the_next_cycle(record: Record) -> None:
    """A cycle that woke up 1 ms late held the torque before it for 2 ms; a gap of lost rows counts one period only."""
    now = record.columns["now_ns"].copy()
    now[READY + 500 :] += PERIOD_NS
    late = replace(record, columns={**record.columns, "now_ns": now})
    assert measure(late).effort_nm2_s == pytest.approx(25.0 * (MOVING + 1) * DT_S, rel=ROUNDING)
    numbers = record.row_numbers.copy()
    numbers[READY + 500 :] += 1
    assert measure(replace(late, row_numbers=numbers)).effort_nm2_s == pytest.approx(25.0 * MOVING * DT_S, rel=ROUNDING)


def test_saturation_and_rate_limit_shares(record: Record) -> None:
    """250 of 1000 rows at the torque limit of joint 1, 100 at the rate limit of joint 2."""
    metrics = measure(record)
    assert (metrics.saturation_ratio, metrics.rate_limited_ratio) == (0.25, 0.1)
    assert [joint.saturation_ratio for joint in metrics.joints] == [0.25, 0.0]
    assert [joint.rate_limited_ratio for joint in metrics.joints] == [0.0, 0.1]


def test_torque_rate_of_a_ramp(record: Record) -> None:
    """A torque that grows by 0.5 N m each millisecond has a rate of 500 N m/s, also with a gap in the rows."""
    tau = record.columns["tau_out"].copy()
    tau[:, 0] = 0.5 * record.row_numbers
    tau[:, 1] = 0.0
    numbers = record.row_numbers.copy()
    tau[READY + 300 :, 0] += 77.0
    numbers[READY + 300 :] += 3
    ramp = measure(replace(record, columns={**record.columns, "tau_out": tau}, row_numbers=numbers))
    assert ramp.joints[0].rms_torque_rate == pytest.approx(500.0, rel=ROUNDING)
    assert ramp.rms_torque_rate_nm_s == pytest.approx(500.0 / np.sqrt(2.0), rel=ROUNDING)


def test_lateness_cost_and_missed_states(record: Record) -> None:
    """Constant values are their own percentiles; missed states count in live rows only; one late cycle is the maximum."""
    now = record.columns["now_ns"].copy()
    now[3] += 95_000
    metrics = measure(replace(record, columns={**record.columns, "now_ns": now}))
    assert (metrics.late_p50_ns, metrics.late_p99_ns, metrics.late_max_ns) == (5000.0, 5000.0, 100_000.0)
    assert (metrics.cost_p50_ns, metrics.cost_p99_ns) == (20_000.0, 20_000.0)
    assert metrics.missed_state_count == 2


@source("numpy", "percentile, linear interpolation")
def test_percentiles_of_known_numbers(record: Record) -> None:
    """0..1079 ns of lateness: the median lies halfway between the two middle values."""
    columns = {**record.columns, "now_ns": record.columns["deadline_ns"] + np.arange(record.row_count)}
    metrics = measure(replace(record, columns=columns))
    assert (metrics.late_p50_ns, metrics.late_max_ns) == (539.5, 1079.0)
    assert metrics.late_p99_ns == pytest.approx(0.99 * 1079.0)


def test_stops_and_modes_are_events(record: Record) -> None:
    """Mode changes and the stop, in order, with the names of the record's own header and time since the motion began."""
    metrics = measure(record)
    assert metrics.stops == ("operator_stop",)
    assert [(event.row, event.what, event.text) for event in metrics.events] == [
        (0, "mode", "begins ready"),
        (READY, "mode", "ready to live"),
        (READY + MOVING, "stop", "operator_stop (category 1, commanded)"),
        (READY + MOVING, "mode", "live to braking"),
    ]
    assert [event.t_s for event in metrics.events] == pytest.approx([-0.05, 0.0, 1.0, 1.0], abs=1e-9)


def test_a_dwell_inside_the_motion_counts_and_its_end_does_not(record: Record) -> None:
    """Rows between first and last movement count, also where the reference pauses; what follows the last movement does not."""
    qd_ref = record.columns["qd_ref"].copy()
    qd_ref[READY + 400 : READY + 500] = 0.0
    qd_ref[READY + 900 :] = 0.0
    counted = counted_rows(replace(record, columns={**record.columns, "qd_ref": qd_ref}))
    assert list(np.flatnonzero(counted)[[0, -1]]) == [READY, READY + 899]
    assert counted.sum() == 900


def test_rows_out_of_force_inside_the_motion_do_not_count(record: Record) -> None:
    """A stop and a new start within one record: only the rows in which the law was in force count."""
    mode = record.columns["mode"].copy()
    mode[READY + 300 : READY + 420] = MODE_BRAKING
    counted = counted_rows(replace(record, columns={**record.columns, "mode": mode}))
    assert counted.sum() == MOVING - 120
    assert not counted[READY + 300 : READY + 420].any()


def test_a_hold_counts_all_live_rows(record: Record) -> None:
    """A reference that never moves is judged over the whole time in force."""
    still = replace(record, columns={**record.columns, "qd_ref": np.zeros_like(record.columns["qd_ref"])})
    assert counted_rows(still).sum() == MOVING


def test_sliding_joints_are_kept_apart(tmp_path: Path) -> None:
    """Metres and radians never meet in one number, nor newtons and newton metres."""
    arm = InventedArm(n=2, units=("rad", "m"))
    mixed = measure(read_record(make_record(tmp_path / "mixed.record", sine_run, READY + MOVING, arm=arm)))
    assert mixed.rms_error_rad == pytest.approx(AMPLITUDE_RAD / np.sqrt(2.0), rel=ROUNDING)
    assert (mixed.rms_error_m, mixed.peak_error_m) == (0.0, 0.0)
    assert (mixed.effort_nm2_s, mixed.effort_n2_s) == pytest.approx((9.0, 16.0), rel=ROUNDING)
    assert {"rms_error_m", "effort_n2_s", "peak_torque_n", "rms_torque_rate_n_s"} <= mixed.as_json()["joints"][1].keys()


def test_a_record_without_live_rows_gives_no_number(tmp_path: Path) -> None:
    """Nothing to count is null in JSON, a dash in the table, and said."""
    none = read_record(make_record(tmp_path / "none.record", sine_run, READY))
    comparison = compare([none])
    values = comparison.as_json()["records"][0]
    assert (values["rms_error_rad"], values["counted_count"], values["saturation_ratio"]) == (None, 0, None)
    assert table_line(comparison.metrics[0], comparison.metrics)[1:4] == ["-", "-", "0"]
    assert [str(finding) for finding in comparison.findings] == [
        "pd: must be a run in which the law was in force, got none. There is no error to count."
    ]


def test_an_empty_record_is_measured_without_failing(tmp_path: Path) -> None:
    """A run that ended before its first cycle has a header and no rows."""
    metrics = measure(read_record(make_record(tmp_path / "empty.record", sine_run, 0)))
    assert (metrics.row_count, metrics.law, metrics.events) == (0, "", ())


def test_fair_records_are_compared_without_a_word(record: Record) -> None:
    """Same arm, limits and reference: nothing stands against it. JSON is valid JSON."""
    comparison = compare([record, record])
    assert comparison.comparable
    assert [metrics.label for metrics in comparison.metrics] == ["pd (sine.record)"] * 2
    assert json.loads(json.dumps(comparison.as_json(), allow_nan=False))["verdict"] == "pass"


@pytest.mark.parametrize("name", ["arm", "limits", "reference"])
def test_another_hash_is_marked_not_hidden(record: Record, name: str) -> None:
    """Numbers of runs that differ in arm, limits or reference stay visible, with the difference named."""
    header = {**record.header, "hashes": {**record.header["hashes"], name: "9" * 64}}
    comparison = compare([record, replace(record, header=header, path="other.record")])
    assert [str(finding) for finding in comparison.findings] == [
        f"pd (other.record): must be run with the same {name} as pd (sine.record) "
        f"(hash {record.header['hashes'][name][:12]}), got another one (hash 999999999999). "
        "Not comparable: repeat the runs with one arm file, one limits file and one reference."
    ]
    assert comparison.as_json()["verdict"] == "warn"
    assert comparison.as_json()["records"][1]["rms_error_rad"] is not None


def test_simulated_and_real_are_not_mixed_silently(record: Record) -> None:
    """A run on a real arm beside one on a simulated arm is said."""
    real = replace(record, header={**record.header, "simulated": False}, path="real.record")
    assert [str(finding) for finding in compare([record, real]).findings] == [
        "pd (real.record): must be run on a simulated arm as pd (sine.record), got a real arm."
    ]


def test_a_shorter_motion_is_marked(record: Record) -> None:
    """A run that covered less of the motion took less effort for that reason alone."""
    short = record.columns["mode"].copy()
    short[READY + 800 :] = MODE_BRAKING
    other = replace(record, columns={**record.columns, "mode": short}, path="short.record")
    assert [str(finding) for finding in compare([record, other]).findings] == [
        "pd (short.record): must be run over the same time of motion as pd (sine.record) (1.000 s), got 0.800 s. "
        "Their efforts are not comparable."
    ]


def test_cut_damaged_gapped_and_stopped_runs_are_marked(record: Record) -> None:
    """Whatever makes the numbers cover less than the run is said beside them."""
    fault = np.where(np.arange(record.row_count) < READY + MOVING, 0, 12)
    cases = [
        (
            replace(record, complete=False),
            "must be a record with an end, got one that was cut off. Its last rows may be missing.",
        ),
        (
            replace(record, complete=False, damage="block 3 was changed"),
            "must be an undamaged record, got block 3 was changed. Only the rows before that are counted.",
        ),
        (replace(record, lost_rows=4), "must be a record without gaps, got 4 lost rows. The recorder was too slow or was away."),
        (
            replace(record, columns={**record.columns, "first_cause": fault}),
            "must be a run without a fault, got tracking_error. Errors and effort cover the time before the stop only.",
        ),
    ]
    for changed, text in cases:
        assert [str(finding) for finding in compare([changed]).findings] == ["pd: " + text]


def test_the_table_has_a_line_per_record_and_says_what_is_unfair(record: Record) -> None:
    """Numbers with units in the headings; findings in the caption."""
    from rich.console import Console

    text = io.StringIO()
    Console(file=text, width=200).print(compare([record, replace(record, lost_rows=4, path="b.record")]).table())
    shown = text.getvalue()
    assert "10.0" in shown  # mrad: A / 2
    assert "25.0" in shown  # N^2 m^2 s, and % saturated
    assert "[N^2 m^2 s]" in shown
    assert "got 4 lost rows" in shown


def test_csv_has_the_numbers_of_json(record: Record) -> None:
    """One line for all joints and one per joint."""
    comparison = compare([record])
    lines = list(csv.DictReader(io.StringIO(comparison.as_csv())))
    assert [line["joint"] for line in lines] == ["all", "joint_1", "joint_2"]
    assert float(lines[0]["effort_nm2_s"]) == comparison.metrics[0].effort_nm2_s
    assert float(lines[1]["rms_error_rad"]) == comparison.metrics[0].joints[0].rms_error


def test_a_larger_error_gives_larger_numbers(tmp_path: Path) -> None:
    """Two invented motions of four and one hundredths of a radian come out in that proportion."""
    paths = [motion_record(tmp_path / f"{e}.record", Motion(error_rad=e)) for e in (0.01, 0.04)]
    small, large = compare([read_record(path) for path in paths]).metrics
    assert large.rms_error_rad == pytest.approx(4.0 * small.rms_error_rad, rel=1e-9)
