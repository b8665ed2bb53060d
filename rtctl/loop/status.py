"""What a running controller says about itself: one plain dictionary, made from the newest row and the loop's counts."""

from typing import Any

import numpy as np

from rtctl.blocks import (
    MODE_NAMES,
    STATUS_BRAKE,
    STATUS_ENABLED,
    STATUS_FAULT,
    STATUS_GRAVITY_ADDED,
    STATUS_SIMULATED,
    STATUS_STOP_CHAIN_CLOSED,
    STOP_NAMES,
    WATCH_NAMES,
)
from rtctl.causes import CAUSES, cause
from rtctl.loop.blocks import BIN_NS

_DRIVER_BITS = {
    "enabled": STATUS_ENABLED,
    "brake_closed": STATUS_BRAKE,
    "fault": STATUS_FAULT,
    "stop_chain_closed": STATUS_STOP_CHAIN_CLOSED,
    "gravity_added": STATUS_GRAVITY_ADDED,
    "simulated": STATUS_SIMULATED,
}


def percentile_us(bins: np.ndarray, percent: float) -> float:
    """Upper edge of the histogram bin that holds a percentile, in microseconds; 0 when nothing was counted."""
    total = int(bins.sum())
    if total == 0:
        return 0.0
    k = int(np.searchsorted(np.cumsum(bins), total * percent / 100.0))
    return (k + 1) * BIN_NS / 1000.0


def timing(loop: np.void) -> dict[str, Any]:
    """Lateness, cost and counts of the loop so far."""
    late, cost = loop["late_bins"], loop["cost_bins"]
    return {
        "cycle_count": int(loop["cycles"]),
        "skipped_count": int(loop["skipped_total"]),
        "late_p50_us": percentile_us(late, 50.0),
        "late_p99_us": percentile_us(late, 99.0),
        "late_max_us": int(loop["late_max_ns"]) / 1000.0,
        "cost_p50_us": percentile_us(cost, 50.0),
        "cost_p99_us": percentile_us(cost, 99.0),
        "cost_max_us": int(loop["cost_max_ns"]) / 1000.0,
        "state_count": int(loop["states_total"]),
        "silent_count": int(loop["silent_total"]),
        "refused_count": int(loop["refused_total"]),
        "flooded_count": int(loop["flooded_total"]),
        "send_failed_count": int(loop["send_failed_total"]),
        "socket_error_count": int(loop["socket_errors"]),
    }


def conditions_of(row: np.void) -> list[str]:
    """Names of the watches that trip in this row."""
    return [name for w, name in enumerate(WATCH_NAMES) if int(row["conditions"]) >> w & 1]


def why_no_start(row: np.void) -> list[str]:
    """Why a start was not accepted, in sentences; never empty."""
    mode = MODE_NAMES[int(row["mode"])]
    if mode == "latched":
        return [f"Latched: {cause(int(row['first_cause'])).sentence} Find the cause, then reset."]
    by_name = {entry.name: entry for entry in CAUSES}
    reasons = [f"{by_name[name].sentence} {by_name[name].next}" for name in conditions_of(row) if name != "operator_stop"]
    if not reasons and mode == "off":
        reasons.append(
            "The checks have not held long enough, the arm is not still, or the holding torque does not fit the limits."
        )
    return reasons or [f"The controller is in {mode}."]


def explain(row: np.void) -> dict[str, Any]:
    """The first cause with everything the table of causes says about it."""
    entry = cause(int(row["first_cause"]))
    return {
        "code": entry.code,
        "cause": entry.name,
        "sentence": entry.sentence,
        "likely": list(entry.likely),
        "next": entry.next,
        "conditions": conditions_of(row),
    }


def status_of(row: np.void, loop: np.void) -> dict[str, Any]:
    """Mode, cause, margins, age, delay, driver and timing."""
    bits = int(row["status"])
    return {
        "mode": MODE_NAMES[int(row["mode"])],
        "stop": STOP_NAMES[int(row["stop"])],
        "cause": cause(int(row["first_cause"])).name,
        "conditions": conditions_of(row),
        "margins": {name: float(row["margins"][w]) for w, name in enumerate(WATCH_NAMES)},
        "t_s": float(row["t_s"]),
        "age_ns": int(row["age_ns"]),
        "loop_delay_ns": int(row["loop_delay_ns"]),
        "driver": {
            "session": int(row["driver_session"]),
            "sequence": int(row["state_sequence"]),
            "holder": int(row["holder"]),
            "grant": int(row["grant"]),
            **{name: bool(bits & bit) for name, bit in _DRIVER_BITS.items()},
        },
        "timing": timing(loop),
    }
