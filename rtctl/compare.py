"""Control laws side by side: one set of numbers per record, and what stands against comparing them.

Tracking error and effort count only the rows in which the law was in force (mode live) and the reference was in motion: from its
first to its last moving row. A reference that never moves (hold) counts all live rows. Timing counts every row.
Start reading at `measure`.
"""

import csv
import io
from collections.abc import Sequence
from dataclasses import asdict, dataclass
from typing import TYPE_CHECKING, Any

import numpy as np

from rtctl.blocks import LIMITER_MAGNITUDE, LIMITER_RATE, MODE_LIVE, STOP_NONE
from rtctl.errors import Finding
from rtctl.record.reader import Record

if TYPE_CHECKING:
    from rich.table import Table

SPAN_TOLERANCE = 0.01  # counted motion may differ by this much between records: a few late cycles, not a stop
SAME = ("arm", "limits", "reference")  # hashes that must agree for a fair comparison


@dataclass(frozen=True)
class Event:
    """A change worth a line: the mode, or a stop with its first cause."""

    row: int
    cycle: int
    t_s: float  # since the first counted row
    what: str  # "mode" or "stop"
    text: str


@dataclass(frozen=True)
class JointMetrics:
    """One joint; units are those of the joint: rad, N m, N m/s or m, N, N/s."""

    name: str
    unit: str  # rad or m
    rms_error: float
    peak_error: float
    effort: float  # N^2 m^2 s or N^2 s
    saturation_ratio: float  # share of the counted rows in which the torque limit acted
    rate_limited_ratio: float
    rms_torque_rate: float
    peak_torque: float


@dataclass(frozen=True)
class Metrics:
    """The numbers of one record. NaN where there is nothing to count."""

    label: str
    path: str
    law: str
    row_count: int
    counted_count: int  # rows with the law in force and the reference in motion
    counted_s: float
    joints: tuple[JointMetrics, ...]
    rms_error_rad: float  # over all turning joints
    peak_error_rad: float
    rms_error_m: float  # over all sliding joints
    peak_error_m: float
    effort_nm2_s: float  # N^2 m^2 s: time integral of the sum of squared torques of turning joints
    effort_n2_s: float
    saturation_ratio: float  # share of the counted rows in which any joint's torque limit acted
    rate_limited_ratio: float
    rms_torque_rate_nm_s: float
    late_p50_ns: float
    late_p99_ns: float
    late_max_ns: float
    cost_p50_ns: float
    cost_p99_ns: float
    skipped_count: int
    missed_state_count: int  # live cycles without a new state
    refused_count: int
    send_failed_count: int
    lost_count: int
    complete: bool
    damage: str | None
    simulated: bool
    stops: tuple[str, ...]  # first causes, in order
    events: tuple[Event, ...]

    @property
    def faults(self) -> tuple[str, ...]:
        """First causes other than a stop that was asked for."""
        return tuple(stop for stop in self.stops if stop != "operator_stop")

    def as_json(self) -> dict[str, Any]:
        """Plain values with the unit at the end of each key; what cannot be counted is null."""
        values = asdict(self)
        values["joints"] = [_joint_json(joint) for joint in self.joints]
        values["events"] = [asdict(event) for event in self.events]
        values["stops"] = list(self.stops)
        return {key: _null_for_nan(value) for key, value in values.items()}


def _joint_json(joint: JointMetrics) -> dict[str, Any]:
    length, force, effort = ("m", "n", "n2_s") if joint.unit == "m" else ("rad", "nm", "nm2_s")
    values = {
        "name": joint.name,
        f"rms_error_{length}": joint.rms_error,
        f"peak_error_{length}": joint.peak_error,
        f"effort_{effort}": joint.effort,
        "saturation_ratio": joint.saturation_ratio,
        "rate_limited_ratio": joint.rate_limited_ratio,
        f"rms_torque_rate_{force}_s": joint.rms_torque_rate,
        f"peak_torque_{force}": joint.peak_torque,
    }
    return {key: _null_for_nan(value) for key, value in values.items()}


def _null_for_nan(value: Any) -> Any:
    return None if isinstance(value, float) and not np.isfinite(value) else value


# ---- one record ------------------------------------------------------------------------------------------------------------------


def counted_rows(record: Record) -> np.ndarray:
    """Which rows count for tracking and effort: law in force, reference in motion. (rows,) bool."""
    columns = record.columns
    live: np.ndarray = columns["mode"] == MODE_LIVE
    moving = np.flatnonzero(live & ((columns["qd_ref"] != 0.0) | (columns["qdd_ref"] != 0.0)).any(axis=1))
    if not len(moving):
        return live
    span = np.zeros(len(live), bool)
    span[moving[0] : moving[-1] + 1] = True
    span &= live
    return span


def row_seconds(record: Record) -> np.ndarray:
    """How long the torque of each row was in force, s: until the next cycle woke up; one period at gaps and at the end. (rows,)"""
    now = record.columns["now_ns"]
    period_ns = record.header["period_ns"]
    held = np.full(len(now), period_ns, np.int64)
    held[:-1] = np.diff(now)
    held[:-1][np.diff(record.row_numbers) != 1] = period_ns
    seconds: np.ndarray = held / 1e9
    return seconds


def motion_seconds(record: Record) -> np.ndarray:
    """Time of each row since the first counted row, s: the time axis that records of one motion share. (rows,)"""
    now = record.columns["now_ns"]
    first = np.flatnonzero(counted_rows(record))
    zero = now[first[0]] if len(first) else (now[0] if len(now) else 0)
    seconds: np.ndarray = (now - zero) / 1e9
    return seconds


def events(record: Record) -> tuple[Event, ...]:
    """Changes of mode, and stops with their first cause, in order."""
    columns, header = record.columns, record.header
    t_s = motion_seconds(record)
    found: list[Event] = []

    def add(row: int, what: str, text: str) -> None:
        found.append(Event(row, int(columns["cycle"][row]), float(t_s[row]), what, text))

    mode, stop, cause = columns["mode"], columns["stop"], columns["first_cause"]
    for row in range(len(mode)) if len(mode) < 2 else [0, *(np.flatnonzero(_changes(mode, stop, cause)) + 1)]:
        before = int(row) - 1
        if cause[row] and (before < 0 or cause[row] != cause[before]):
            why = _name(header["causes"], cause[row])
            add(int(row), "stop", f"{why} ({_name(header['stops'], stop[row])})")
        elif stop[row] != STOP_NONE and (before < 0 or stop[row] > stop[before]):
            add(int(row), "stop", f"stop: {_name(header['stops'], stop[row])}")
        if before < 0 or mode[row] != mode[before]:
            came = "begins " if before < 0 else f"{_name(header['modes'], mode[before])} to "
            add(int(row), "mode", came + _name(header["modes"], mode[row]))
    return tuple(found)


def _changes(*columns: np.ndarray) -> np.ndarray:
    changed: np.ndarray = np.any([np.diff(column) != 0 for column in columns], axis=0)
    return changed


def _name(names: Sequence[str], code: int) -> str:
    return names[code] if 0 <= code < len(names) else f"code {code}"


def _stops(record: Record) -> tuple[str, ...]:
    cause = record.columns["first_cause"]
    began = np.flatnonzero((cause != 0) & (np.concatenate([[0], cause[:-1]]) != cause))
    return tuple(_name(record.header["causes"], int(code)) for code in cause[began])


def _rms(values: np.ndarray) -> float:
    return float(np.sqrt(np.mean(np.square(values)))) if values.size else float("nan")


def _peak(values: np.ndarray) -> float:
    return float(np.abs(values).max()) if values.size else float("nan")


def _share(flags: np.ndarray) -> float:
    return float(np.mean(flags)) if flags.size else float("nan")


def _percentiles(values: np.ndarray) -> tuple[float, float, float]:
    if not values.size:
        return (float("nan"),) * 3
    p50, p99 = np.percentile(values, (50, 99))
    return float(p50), float(p99), float(values.max())


def torque_rate(record: Record, counted: np.ndarray) -> np.ndarray:
    """Steps of the torque between neighbouring counted rows, divided by the period: N m/s (N/s). (pairs, n)"""
    together = counted[1:] & counted[:-1] & (np.diff(record.row_numbers) == 1)
    steps: np.ndarray = np.diff(record.columns["tau_out"], axis=0)[together]
    steps /= record.header["period_ns"] / 1e9
    return steps


def measure(record: Record, label: str | None = None) -> Metrics:
    """All numbers of one record.

    label   what to call it; None = its law

    Sources: RMS and peak of q_ref - q; effort as the integral of tau^2 with the torque held between cycles, which is what a
    sampled controller does.
    """
    columns = record.columns
    counted = counted_rows(record)
    seconds = row_seconds(record)[counted]
    error = (columns["q_ref"] - columns["q"])[counted]
    tau = columns["tau_out"][counted]
    effort = (np.square(tau) * seconds[:, None]).sum(axis=0)
    limiters = columns["limiters"][counted]
    saturated, rate_limited = (limiters & LIMITER_MAGNITUDE) != 0, (limiters & LIMITER_RATE) != 0
    rate = torque_rate(record, counted)
    units = record.header["joint_units"]
    turning = np.array([unit != "m" for unit in units], bool)
    joints = tuple(
        JointMetrics(
            name=name,
            unit=units[j],
            rms_error=_rms(error[:, j]),
            peak_error=_peak(error[:, j]),
            effort=float(effort[j]),
            saturation_ratio=_share(saturated[:, j]),
            rate_limited_ratio=_share(rate_limited[:, j]),
            rms_torque_rate=_rms(rate[:, j]),
            peak_torque=_peak(tau[:, j]),
        )
        for j, name in enumerate(record.joint_names)
    )
    late = _percentiles(columns["now_ns"] - columns["deadline_ns"])
    cost = _percentiles(columns["cost_ns"][1:])  # a row carries the cost of the cycle before it
    law = ", ".join(record.law_names)
    live = columns["mode"] == MODE_LIVE
    return Metrics(
        label=label or law,
        path=record.path,
        law=law,
        row_count=record.row_count,
        counted_count=int(counted.sum()),
        counted_s=float(seconds.sum()),
        joints=joints,
        rms_error_rad=_rms(error[:, turning]),
        peak_error_rad=_peak(error[:, turning]),
        rms_error_m=_rms(error[:, ~turning]),
        peak_error_m=_peak(error[:, ~turning]),
        effort_nm2_s=float(effort[turning].sum()) if turning.any() else float("nan"),
        effort_n2_s=float(effort[~turning].sum()) if not turning.all() else float("nan"),
        saturation_ratio=_share(saturated.any(axis=1)),
        rate_limited_ratio=_share(rate_limited.any(axis=1)),
        rms_torque_rate_nm_s=_rms(rate[:, turning]),
        late_p50_ns=late[0],
        late_p99_ns=late[1],
        late_max_ns=late[2],
        cost_p50_ns=cost[0],
        cost_p99_ns=cost[1],
        skipped_count=int(columns["skipped"].sum()),
        missed_state_count=int((live & (columns["state_new"] == 0)).sum()),
        refused_count=int(columns["refused"].sum()),
        send_failed_count=int(columns["send_failed"].sum()),
        lost_count=record.lost_rows,
        complete=record.complete,
        damage=record.damage,
        simulated=bool(record.header["simulated"]),
        stops=_stops(record),
        events=events(record),
    )


# ---- several records -------------------------------------------------------------------------------------------------------------


@dataclass(frozen=True)
class Comparison:
    """Numbers side by side, and what stands against comparing them."""

    metrics: tuple[Metrics, ...]
    findings: tuple[Finding, ...]  # severity "warn"

    @property
    def comparable(self) -> bool:
        """Same arm description, limits and reference, all whole, none stopped by a fault, all simulated or none."""
        return not self.findings

    def as_json(self) -> dict[str, Any]:
        """One plain object: verdict, records and findings."""
        return {
            "verdict": "pass" if self.comparable else "warn",
            "records": [metrics.as_json() for metrics in self.metrics],
            "findings": [asdict(finding) for finding in self.findings],
        }

    def as_csv(self) -> str:
        """The same numbers as a table for a spreadsheet: one line per record and joint, and one per record for all joints."""
        names = ["record", "joint"]
        rows: list[dict[str, Any]] = []
        for metrics in self.metrics:
            whole = {k: v for k, v in metrics.as_json().items() if k not in ("joints", "events", "label")}
            rows.append({"record": metrics.label, "joint": "all", **whole, "stops": " ".join(metrics.stops)})
            rows.extend(
                {"record": metrics.label, "joint": j.name, **{k: v for k, v in _joint_json(j).items() if k != "name"}}
                for j in metrics.joints
            )
        for row in rows:
            names.extend(key for key in row if key not in names)
        text = io.StringIO()
        writer = csv.DictWriter(text, names, restval="", lineterminator="\n")
        writer.writeheader()
        writer.writerows(rows)
        return text.getvalue()

    def table(self) -> "Table":
        """The main numbers for a terminal: one line per record, what stands against the comparison below."""
        from rich import box
        from rich.table import Table
        from rich.text import Text

        table = Table(
            box=box.SIMPLE_HEAD, caption=Text(self.caption()) if self.findings else None, caption_justify="left", padding=(0, 1)
        )
        for heading in table_headings(self.metrics):
            left = heading in ("record", "stops")
            table.add_column(Text(heading), justify="left" if left else "right", no_wrap=heading != "stops", vertical="bottom")
        for metrics in self.metrics:
            table.add_row(*(Text(cell) for cell in table_line(metrics, self.metrics)))
        return table

    def caption(self) -> str:
        """What stands against the comparison, one sentence per line; empty when nothing does."""
        return "\n".join(str(finding) for finding in self.findings)


def _sliding(all_metrics: Sequence[Metrics]) -> bool:
    return any(joint.unit == "m" for metrics in all_metrics for joint in metrics.joints)


def table_headings(all_metrics: Sequence[Metrics]) -> list[str]:
    """Headings of the table, with units."""
    sliding = ["RMS\nerror\n[mm]", "peak\nerror\n[mm]", "effort\n[N^2 s]"] if _sliding(all_metrics) else []
    return [
        "record",
        "RMS\nerror\n[mrad]",
        "peak\nerror\n[mrad]",
        "effort\n[N^2 m^2 s]",
        *sliding,
        "satu-\nrated\n[%]",
        "late [us]\np50/p99/max",
        "cost [us]\np50/p99",
        "states\nmissed",
        "stops",
    ]


def table_line(metrics: Metrics, all_metrics: Sequence[Metrics]) -> list[str]:
    """One line of the table."""
    sliding = [_number(1e3 * metrics.rms_error_m), _number(1e3 * metrics.peak_error_m), _number(metrics.effort_n2_s)]
    return [
        metrics.label,
        _number(1e3 * metrics.rms_error_rad),
        _number(1e3 * metrics.peak_error_rad),
        _number(metrics.effort_nm2_s),
        *(sliding if _sliding(all_metrics) else []),
        _number(100.0 * metrics.saturation_ratio),
        _microseconds(metrics.late_p50_ns, metrics.late_p99_ns, metrics.late_max_ns),
        _microseconds(metrics.cost_p50_ns, metrics.cost_p99_ns),
        str(metrics.missed_state_count),
        ", ".join(metrics.stops) or "none",
    ]


def _microseconds(*values_ns: float) -> str:
    return "/".join(f"{1e-3 * value:.0f}" if np.isfinite(value) else "-" for value in values_ns)


def _number(value: float) -> str:
    """Three significant digits without exponent in the usual range; a dash for what cannot be counted."""
    if not np.isfinite(value):
        return "-"
    if value == 0.0 or 1e-3 <= abs(value) < 1e6:
        digits = 0 if value == 0.0 else max(0, 2 - int(np.floor(np.log10(abs(value)))))
        return f"{value:.{digits}f}"
    return f"{value:.2e}"


def _labels(records: Sequence[Record]) -> list[str]:
    """The law's name, with the file's name where two records have the same law."""
    laws = [", ".join(record.law_names) for record in records]
    names = [record.path.rsplit("/", 1)[-1] for record in records]
    return [law if laws.count(law) == 1 else f"{law} ({name})" for law, name in zip(laws, names, strict=True)]


def compare(records: Sequence[Record]) -> Comparison:
    """Measure every record and say what stands against comparing them. The first record is what the others are held to."""
    labels = _labels(records)
    metrics = tuple(measure(record, label) for record, label in zip(records, labels, strict=True))
    findings: list[Finding] = []
    for record, found in zip(records, metrics, strict=True):
        findings.extend(_against(record, found))
    for record, found in zip(records[1:], metrics[1:], strict=True):
        findings.extend(_against_first(records[0], metrics[0], record, found))
    return Comparison(metrics, tuple(findings))


def _warning(where: str, expected: str, got: str, likely: str = "", next_step: str = "") -> Finding:
    return Finding(where, expected, got, likely, next_step, severity="warn")


def _against(record: Record, metrics: Metrics) -> list[Finding]:
    """What is wrong with one record by itself."""
    found = []
    if record.damage:
        found.append(
            _warning(metrics.label, "an undamaged record", record.damage, next_step="Only the rows before that are counted.")
        )
    elif not record.complete:
        found.append(
            _warning(metrics.label, "a record with an end", "one that was cut off", next_step="Its last rows may be missing.")
        )
    if record.lost_rows:
        found.append(
            _warning(
                metrics.label, "a record without gaps", f"{record.lost_rows} lost rows", "The recorder was too slow or was away."
            )
        )
    if metrics.counted_count == 0:
        found.append(
            _warning(metrics.label, "a run in which the law was in force", "none", next_step="There is no error to count.")
        )
    if metrics.faults:
        found.append(
            _warning(
                metrics.label,
                "a run without a fault",
                ", ".join(metrics.faults),
                next_step="Errors and effort cover the time before the stop only.",
            )
        )
    if len(record.law_names) > 1:
        found.append(_warning(metrics.label, "a run of one law", ", ".join(record.law_names), next_step="The numbers mix them."))
    return found


def _against_first(first: Record, first_metrics: Metrics, record: Record, metrics: Metrics) -> list[Finding]:
    """What makes a record unfair to compare with the first one."""
    found = []
    ours, theirs = record.header["hashes"], first.header["hashes"]
    for name in SAME:
        if ours.get(name) != theirs.get(name):
            found.append(
                _warning(
                    metrics.label,
                    f"run with the same {name} as {first_metrics.label} (hash {str(theirs.get(name))[:12]})",
                    f"another one (hash {str(ours.get(name))[:12]})",
                    next_step="Not comparable: repeat the runs with one arm file, one limits file and one reference.",
                )
            )
    span_s, first_span_s = metrics.counted_s, first_metrics.counted_s
    if abs(span_s - first_span_s) > SPAN_TOLERANCE * first_span_s:
        found.append(
            _warning(
                metrics.label,
                f"run over the same time of motion as {first_metrics.label} ({first_span_s:.3f} s)",
                f"{span_s:.3f} s",
                next_step="Their efforts are not comparable.",
            )
        )
    if metrics.simulated != first_metrics.simulated:
        kinds = {True: "a simulated arm", False: "a real arm"}
        found.append(
            _warning(metrics.label, f"run on {kinds[first_metrics.simulated]} as {first_metrics.label}", kinds[metrics.simulated])
        )
    return found
