"""A test stand for single cycles: a two-joint arm, a well-behaved driver in Python and a time that is only counted.

The joint positions are whatever the test sets: no physics. Faults are planted by changing what the driver says or when.
"""

from typing import Any

import numpy as np

from rtctl.blocks import (
    BIT_START,
    INPUT,
    LAW_INPUT,
    LAW_PARAMETERS,
    MEMORY,
    MODE_LIVE,
    MODE_NAMES,
    MODE_READY,
    POINTERS,
    REFERENCE_MEMORY,
    REFERENCE_SAMPLE,
    REQUEST_ASK,
    REQUEST_DRIVE,
    REQUEST_RELEASE,
    ROW,
    SETUP,
    STATUS_BRAKE,
    STATUS_ENABLED,
    STATUS_SIMULATED,
    STATUS_STOP_CHAIN_CLOSED,
    STOP_FAULT,
    TORQUE,
    WATCH_NAMES,
    WIRE_VERSION,
)
from rtctl.causes import cause
from rtctl.cycle import begin_memory, cycle
from rtctl.kernels.compile import callback
from rtctl.kernels.layout import OK, new_block
from rtctl.kernels.memory import array_at, block_at

PERIOD_NS = 1_000_000
ARM_KEY = 77
DRIVER_SESSION = 500
SESSION = 900
HEALTHY = STATUS_ENABLED | STATUS_STOP_CHAIN_CLOSED | STATUS_SIMULATED


def stand_law(model: int, x: int, parameters: int, memory: int, scratch: int, terms: int) -> int:
    """Two terms: Kp times error, and a constant; `extra[0]` is the status returned."""
    x_block = block_at(x, LAW_INPUT)
    p = block_at(parameters, LAW_PARAMETERS)
    flat = array_at(terms, 8 * 16, np.float64)
    for i in range(x_block["n"]):
        flat[i] = p["Kp"][i] * (x_block["q_ref"][i] - x_block["q"][i])
        flat[16 + i] = p["Kd"][i]
    return int(p["extra"][0])


def stand_begin(parameters: int, memory: int, sample: int) -> int:
    """Start at the measured pose; the motion never ends."""
    m = block_at(memory, REFERENCE_MEMORY)
    s = block_at(sample, REFERENCE_SAMPLE)
    for i in range(16):
        m["q_start"][i] = s["q_ref"][i]
    m["end_s"] = np.inf
    return 1


def stand_sample(parameters: int, memory: int, sample: int) -> int:
    """Hold the start pose."""
    m = block_at(memory, REFERENCE_MEMORY)
    s = block_at(sample, REFERENCE_SAMPLE)
    for i in range(16):
        s["q_ref"][i] = m["q_start"][i]
        s["qd_ref"][i] = 0.0
        s["qdd_ref"][i] = 0.0
    return 1


class Driver:
    """What a correct driver says, as plain values that a test may spoil."""

    def __init__(self) -> None:
        self.session = DRIVER_SESSION
        self.sequence = 10
        self.clock_offset_ns = 123_456_789
        self.status = HEALTHY | STATUS_BRAKE
        self.holder = 0
        self.grant = 4
        self.received = (0, 0)
        self.applied = (0, 0)
        self.q = [0.3, -0.2]
        self.qd = [0.0, 0.0]
        self.arm_key = ARM_KEY
        self.version = WIRE_VERSION
        self.hears = True

    def hear(self, torque: np.void) -> None:
        """Take a torque message: the grant on `ask`, the brake on the first `drive`, the rest policy on `release`."""
        if not self.hears:
            return
        self.received = (int(torque["session"]), int(torque["sequence"]))
        request = int(torque["request"])
        if request == REQUEST_ASK and self.holder == 0:
            self.grant += 1
            self.holder = int(torque["session"])
        if self.holder == int(torque["session"]):
            if request == REQUEST_DRIVE and int(torque["grant"]) == self.grant:
                self.applied = self.received
                self.status &= ~STATUS_BRAKE
            if request == REQUEST_RELEASE:
                self.holder = 0
                self.status |= STATUS_BRAKE

    def say(self, state: np.void, now_ns: int) -> None:
        """Fill a state message sampled now."""
        self.sequence += 1
        state["version"] = self.version
        state["arm_key"] = self.arm_key
        state["session"] = self.session
        state["sequence"] = self.sequence
        state["sample_ns"] = now_ns + self.clock_offset_ns
        state["holder"] = self.holder
        state["grant"] = self.grant
        state["received_session"], state["received_sequence"] = self.received
        state["applied_session"], state["applied_sequence"] = self.applied
        state["status"] = self.status
        state["n"] = 2
        state["q"][:2] = self.q
        state["qd"][:2] = self.qd


class Stand:
    """Blocks, driver and time of one rehearsal. `step()` is one cycle."""

    def __init__(self) -> None:
        self.setup, self.pointers, self.memory = new_block(SETUP), new_block(POINTERS), new_block(MEMORY)
        self.input, self.torque, self.row = new_block(INPUT), new_block(TORQUE), new_block(ROW)
        self.driver = Driver()
        self.now_ns = 5_000_000_000
        self.beat = 1
        self.late_ns = 0
        self.silent = False  # no state arrives
        self._fill_setup()
        self._callbacks = [callback(stand_law, "stand", 6), callback(stand_begin, "stand", 3), callback(stand_sample, "stand", 3)]
        law, begin, sample = (entry.address for entry in self._callbacks)
        self.pointers["law"], self.pointers["reference_begin"], self.pointers["reference_sample"] = law, begin, sample
        self.pointers["law_term_count"] = 2
        self.pointers["law_parameters"]["Kp"][:2] = (50.0, 20.0)
        self.pointers["law_parameters"]["extra"][0] = OK
        begin_memory(self.memory)

    def _fill_setup(self) -> None:
        setup = self.setup
        setup["session"], setup["period_ns"] = SESSION, PERIOD_NS
        model = setup["model"]
        model["n"] = 2
        model["parent"][:2] = (-1, 0)
        # A planar arm in the x-y plane of the base: both axes along z, gravity along -y.
        model["R_parent"][:2] = np.eye(3)
        model["p_parent"][1] = (0.3, 0.0, 0.0)
        model["mass"][:2] = (2.0, 1.0)
        model["h"][:2] = ((0.3, 0.0, 0.0), (0.12, 0.0, 0.0))
        model["I"][:2] = ((0.01, 0, 0, 0.07, 0, 0.07), (0.004, 0, 0, 0.02, 0, 0.02))
        model["gravity"][:] = (0.0, -9.80665, 0.0)
        limits = setup["limits"]
        limits["n"], limits["arm_key"] = 2, ARM_KEY
        wide = {
            "q_min": -2.0,
            "q_max": 2.0,
            "qd_max": 3.0,
            "tau_max": 40.0,
            "tau_rate_max": 4000.0,
            "brake_tau_rate_max": 8000.0,
            "error_max": 0.2,
            "still_qd": 0.02,
            "brake_damping": 5.0,
            "hold_stiffness": 100.0,
            "hold_torque_max": 6.0,
        }
        for name, value in wide.items():
            limits[name][:2] = value
        plain = {
            "error_dwell_ns": 5_000_000,
            "demand_dwell_ns": 5_000_000,
            "state_age_max_ns": 8_000_000,
            "resend_max": 3,
            "late_ns": 500_000,
            "late_max": 10,
            "late_window": 1000,
            "side_silent_ns": 50_000_000,
            "loop_delay_max_ns": 10_000_000,
            "glitch_factor": 3.0,
            "valid_for_ns": 10_000_000,
            "still_dwell_ns": 10_000_000,
            "ready_dwell_ns": 20_000_000,
            "hold_margin": 0.8,
            "ramp_ns": 10_000_000,
            "brake_deadline_ns": 300_000_000,
            "estop_stop": STOP_FAULT,
        }
        for name, value in plain.items():
            limits[name] = value

    def step(self, requests: int = 0) -> np.void:
        """One cycle, 1 ms later; returns the row."""
        self.now_ns += PERIOD_NS
        inp = self.input
        inp["deadline_ns"] = self.now_ns
        inp["now_ns"] = self.now_ns + self.late_ns
        inp["state_new"] = 0 if self.silent else 1
        if not self.silent:
            self.driver.say(inp["state"], self.now_ns)
            inp["state_arrival_ns"] = self.now_ns
        self.beat += 1
        inp["side_beat"], inp["side_required"] = self.beat, 1
        inp["requests"] = requests
        assert cycle(self.setup, self.pointers, self.memory, inp, self.torque, self.row) == OK
        self.driver.hear(self.torque)
        return self.row

    def until(self, mode: int, limit: int = 200) -> None:
        """Step until a mode is reached; fails the test when it is not."""
        for _ in range(limit):
            if int(self.step()["mode"]) == mode:
                return
        raise AssertionError(f"{MODE_NAMES[mode]} not reached: {self.says()}")

    def to_live(self) -> "Stand":
        """Off, ready, start, live with the ramp over."""
        self.until(MODE_READY)
        self.step(BIT_START)
        for _ in range(15):
            self.step()
        assert self.mode == MODE_LIVE, self.says()
        return self

    @property
    def mode(self) -> int:
        return int(self.row["mode"])

    @property
    def cause(self) -> str:
        return cause(int(self.row["first_cause"])).name

    def conditions(self) -> set[str]:
        """Names of the watches that trip now."""
        return {name for w, name in enumerate(WATCH_NAMES) if int(self.row["conditions"]) >> w & 1}

    def says(self) -> dict[str, Any]:
        """What a failed test prints."""
        return {
            "mode": MODE_NAMES[self.mode],
            "cause": self.cause,
            "conditions": self.conditions(),
            "tau": self.row["tau_out"][:2],
        }
