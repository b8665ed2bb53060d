"""Records with invented contents, made through the real ring and recorder: for tests of reader, compare and report only."""

from collections.abc import Callable, Mapping, Sequence
from dataclasses import dataclass, field
from pathlib import Path
from typing import Any

import numpy as np

from rtctl.blocks import LIMITER_MAGNITUDE, MODE_BRAKING, MODE_HOLDING, MODE_LIVE, MODE_READY, ROW, STOP_NONE, WATCH_COUNT
from rtctl.kernels.layout import new_block
from rtctl.record.append import ring_append
from rtctl.record.header import make_header
from rtctl.record.recorder import ENDED_CLEANLY, Recorder
from rtctl.record.ring import Ring

PERIOD_NS = 1_000_000
TERMS = {"pd": ("proportional", "derivative", "gravity")}


@dataclass(frozen=True)
class InventedArm:
    """What a record needs to know of an arm; all values invented."""

    n: int = 2
    name: str = "invented"
    key: int = 123456
    hash: str = "a" * 64
    path: str = "invented.toml"
    units: tuple[str, ...] = ()
    joint_names: tuple[str, ...] = ()
    q_min: np.ndarray = field(init=False)
    q_max: np.ndarray = field(init=False)
    qd_max: np.ndarray = field(init=False)
    tau_max: np.ndarray = field(init=False)
    tau_rate_max: np.ndarray = field(init=False)

    def __post_init__(self) -> None:
        values = {"q_min": -3.0, "q_max": 3.0, "qd_max": 2.0, "tau_max": 20.0, "tau_rate_max": 500.0}
        for name, value in values.items():
            object.__setattr__(self, name, np.full(self.n, value))
        object.__setattr__(self, "units", self.units or ("rad",) * self.n)
        object.__setattr__(self, "joint_names", self.joint_names or tuple(f"joint_{i + 1}" for i in range(self.n)))


Fill = Callable[[np.void, int], None]


def run_header(ring: Ring, arm: InventedArm, terms: Mapping[str, Sequence[str]], **changes: Any) -> dict[str, Any]:
    """Header of an invented run."""
    values: dict[str, Any] = {
        "run_key": ring.run_key,
        "period_ns": PERIOD_NS,
        "config": {"loop": {"period_s": PERIOD_NS / 1e9}, "origin": "invented"},
        "hashes": {"limits": "b" * 64, "reference": "c" * 64},
        "simulated": True,
        **changes,
    }
    return make_header(arm, terms, **values)  # type: ignore[arg-type]  # stands in for an arm


def make_record(
    path: Path,
    fill: Fill,
    row_count: int,
    *,
    arm: InventedArm | None = None,
    terms: Mapping[str, Sequence[str]] = TERMS,
    rows_per_block: int = 20,
    capacity: int = 256,
    reason: str | None = ENDED_CLEANLY,
    **changes: Any,
) -> Path:
    """Write `row_count` rows, each filled by `fill(row, number)`, to a record. `reason` None leaves it without an end."""
    arm = arm or InventedArm()
    ring = Ring.create(path.with_suffix(".ring"), arm, terms, capacity)  # type: ignore[arg-type]  # stands in for an arm
    recorder = Recorder(ring, path, run_header(ring, arm, terms, **changes))
    row = new_block(ROW)
    for number in range(row_count):
        fill(row, number)
        ring_append(ring.block, row)
        if number % rows_per_block == rows_per_block - 1:
            recorder.step()
    recorder.step()
    if reason is None:
        recorder.close()
        ring.remove()
    else:
        assert recorder.finish(reason)
    return path


def plain_row(row: np.void, number: int) -> None:
    """A row that tells its number in every column."""
    for name in ROW.names or ():
        row[name] = number
    row["law_index"] = 0


def append_rows(ring: Ring, first: int, count: int) -> None:
    """Append rows that carry their number."""
    row = new_block(ROW)
    for number in range(first, first + count):
        plain_row(row, number)
        ring_append(ring.block, row)


@dataclass(frozen=True)
class Motion:
    """An invented run: ready, a sine of given amplitudes with a sine as error, a stop. Not physics: only plausible shapes."""

    n: int = 2
    error_rad: float = 0.01
    error_hz: float = 2.0
    torque: float = 5.0
    ready_s: float = 0.1
    moving_s: float = 2.0
    settled_s: float = 0.2
    stop_s: float | None = None  # time at which a fault stops the arm
    cause: int = 0
    saturated: bool = False
    late_ns: int = 60_000
    seed: int = 1

    @property
    def row_count(self) -> int:
        """Rows of the whole run."""
        return round((self.ready_s + self.moving_s + self.settled_s) * 1e9) // PERIOD_NS

    def fill(self) -> Fill:
        """The function that fills the rows."""
        random = np.random.default_rng(self.seed)
        joints = np.arange(1, self.n + 1)

        def fill(row: np.void, number: int) -> None:
            t_s = number * PERIOD_NS / 1e9 - self.ready_s
            moving = 0.0 <= t_s < self.moving_s
            w = 2.0 * np.pi * joints / self.moving_s
            s = np.clip(t_s, 0.0, self.moving_s)
            row["cycle"] = number
            row["deadline_ns"] = 10**12 + number * PERIOD_NS
            row["now_ns"] = row["deadline_ns"] + int(self.late_ns * random.gamma(2.0) / 2.0)
            row["cost_ns"] = 12_000 + int(2_000 * random.gamma(2.0))
            row["state_new"] = int(random.random() > 0.002)
            row["t_s"] = max(t_s, 0.0)
            row["q_ref"][: self.n] = 0.8 * np.sin(w * s) / joints
            row["qd_ref"][: self.n] = 0.8 * np.cos(w * s) * w / joints if moving else 0.0
            row["qdd_ref"][: self.n] = -0.8 * np.sin(w * s) * w * w / joints if moving else 0.0
            error = self.error_rad * np.sin(2.0 * np.pi * self.error_hz * s) / joints if moving else 0.0
            row["q"][: self.n] = row["q_ref"][: self.n] - error
            row["terms"][0, : self.n] = 200.0 * error
            row["terms"][1, : self.n] = 0.3 * row["qd_ref"][: self.n]
            row["terms"][2, : self.n] = self.torque * np.cos(row["q"][: self.n])
            row["tau_law"][: self.n] = row["terms"].sum(axis=0)[: self.n]
            limit = 1.02 * self.torque if self.saturated else 20.0
            row["tau_out"][: self.n] = np.clip(row["tau_law"][: self.n], -limit, limit)
            row["limiters"][: self.n] = np.where(row["tau_out"] != row["tau_law"], LIMITER_MAGNITUDE, 0)[: self.n]
            row["law_status"] = 1
            row["margins"][:WATCH_COUNT] = 0.9 - 0.02 * np.arange(WATCH_COUNT)
            row["margins"][11] = 1.0 - np.abs(error).max() / 0.05 if moving else 1.0
            row["mode"], row["stop"], row["first_cause"] = (MODE_READY if t_s < 0.0 else MODE_LIVE), STOP_NONE, 0
            if self.stop_s is not None and t_s >= self.stop_s:
                row["mode"] = MODE_BRAKING if t_s < self.stop_s + 0.1 else MODE_HOLDING
                row["stop"], row["first_cause"] = 3, self.cause
                row["margins"][max(self.cause - 1, 0)] = 0.0

        return fill


def motion_record(path: Path, motion: Motion, **changes: Any) -> Path:
    """A record of an invented motion."""
    changes.setdefault("arm", InventedArm(n=motion.n))
    return make_record(path, motion.fill(), motion.row_count, **changes)
