"""A judge of cycles: reads the rows of the record one by one and says which rule of the supervisor a row breaks.

It knows the limits and what the driver and the operator said, nothing of the supervisor's memory or code: the rules and the
categories are written down here a second time, from DEVELOPERS.md and IEC 60204-1.
"""

import math
from collections import Counter

import numpy as np

from rtctl.blocks import (
    BIT_ESTOP,
    BIT_RESET,
    BIT_START,
    BIT_STOP,
    BIT_STOP_RELEASE,
    MODE_BRAKING,
    MODE_HOLDING,
    MODE_LATCHED,
    MODE_LIVE,
    MODE_OFF,
    MODE_READY,
    REQUEST_DRIVE,
    STATUS_ENABLED,
    STATUS_FAULT,
    STATUS_STOP_CHAIN_CLOSED,
    STOP_FAULT,
    STOP_NONE,
    STOP_NOW,
    WATCH_COUNT,
    WATCH_NAMES,
    WIRE_VERSION,
)

FLOWS = (MODE_LIVE, MODE_BRAKING, MODE_HOLDING)
STOPS = BIT_STOP | BIT_STOP_RELEASE | BIT_ESTOP
BOOT_STEP_MAX_NS = 20_000_000
RATE_ROUNDING = 8 * 2.0**-52  # of the largest torque: one rounding of the difference, one of the sum

# The state or the model is what failed, or the driver has taken the arm: release at once (stop category 0).
CATEGORY_0 = {"state_invalid", "clock_jump", "state_age", "driver_fault", "stop_chain", "grant", "position_glitch", "gate"}
# The arm can still be braked (stop category 1), by the mode in which the condition matters.
CATEGORY_1 = {
    MODE_LIVE: {
        "position",
        "speed",
        "law_status",
        "tracking_error",
        "torque_demand",
        "late_cycles",
        "side_thread",
        "loop_delay",
    },
    MODE_BRAKING: {"late_cycles", "side_thread", "loop_delay"},
    MODE_HOLDING: {"position", "speed", "late_cycles", "side_thread", "loop_delay"},
}

LEGAL = {
    MODE_OFF: {MODE_OFF, MODE_READY, MODE_LATCHED},
    MODE_READY: {MODE_OFF, MODE_READY, MODE_LIVE, MODE_LATCHED},
    MODE_LIVE: {MODE_LIVE, MODE_BRAKING, MODE_LATCHED},
    MODE_BRAKING: {MODE_BRAKING, MODE_HOLDING, MODE_READY, MODE_LATCHED},
    MODE_HOLDING: {MODE_HOLDING, MODE_LIVE, MODE_BRAKING, MODE_LATCHED},
    MODE_LATCHED: {MODE_LATCHED, MODE_OFF},
}


def stop_of(watch: str, mode: int, estop_stop: int) -> int:
    """The stop that a condition demands in a mode; commanded stops are no fault and not in here."""
    if watch == "estop":
        return STOP_FAULT if estop_stop == STOP_FAULT else STOP_NOW
    if mode not in FLOWS:
        return STOP_NONE
    if watch in CATEGORY_0 or (watch == "brake_deadline" and mode == MODE_BRAKING):
        return STOP_NOW
    return STOP_FAULT if watch in CATEGORY_1[mode] else STOP_NONE


class Judge:
    """Judges the rows of one run in their order."""

    def __init__(self, limits: np.void, n: int, session: int, period_ns: int, sound_limits: bool = True) -> None:
        """sound_limits: False when a limit may be one that lets the gate refuse every torque, which releases the arm."""
        self.limits, self.n, self.session, self.period_ns, self.sound_limits = limits, n, session, period_ns, sound_limits
        self.mode, self.stop, self.cause, self.request = MODE_OFF, STOP_NONE, 0, 0
        self.tau = [0.0] * n
        self.driver = (-1, -1)  # session and sequence of the newest state that counts
        self.state: dict[str, object] = {}  # what it said
        self.grant = 0  # of the motion
        self.grants: set[tuple[int, int]] = set()  # session of the driver and number, used by a motion
        self.without_state = 0
        self.boot_ns: int | None = None
        self.braking_since_ns = 0
        self.torque_sequence = 0
        self.count: Counter[int] = Counter()  # cycles by mode
        self.seen_moves: set[tuple[int, int]] = set()
        self.seen_causes: set[str] = set()

    def broken(self, row: np.void) -> list[str]:
        """The rules that this row breaks, as sentences."""
        self.broken_rules: list[str] = []
        before = self.mode
        mode, requests = int(row["mode"]), int(row["requests"])
        used = self._take_state(row)
        tripped = {WATCH_NAMES[w] for w in range(WATCH_COUNT) if int(row["conditions"]) >> w & 1}
        self._judge_mode(row, before, mode, requests, tripped)
        self._judge_cause(row, before, mode, requests, tripped)
        self._judge_signals(row, before, mode, used)
        self._judge_torque(row, before, mode, used)
        self._judge_record(row, before, mode, used)
        self.mode, self.stop, self.cause = mode, int(row["stop"]), int(row["first_cause"])
        self.request = int(row["request"])
        self.tau = [float(row["tau_out"][i]) for i in range(self.n)]
        self.boot_ns = int(row["boot_offset_ns"])
        self.count[mode] += 1
        self.seen_moves.add((before, mode))
        return self.broken_rules

    def _rule(self, holds: bool, sentence: str) -> None:
        if not holds:
            self.broken_rules.append(sentence)

    def _take_state(self, row: np.void) -> bool:
        """True when the row's state is one that counts: right arm, and newer than the last of its session."""
        self.foreign = False
        if int(row["state_new"]) != 1:
            return False
        if (int(row["version"]), int(row["arm_key"]), int(row["state_n"])) != (WIRE_VERSION, int(self.limits["arm_key"]), self.n):
            self.foreign = True
            return False
        session, sequence = int(row["driver_session"]), int(row["state_sequence"])
        if session == self.driver[0] and sequence <= self.driver[1]:
            return False
        self.restarted = self.driver[0] not in (-1, session)
        self.driver = (session, sequence)
        self.state = {
            "q": [float(row["q"][i]) for i in range(self.n)],
            "qd": [float(row["qd"][i]) for i in range(self.n)],
            "status": int(row["status"]),
            "grant": int(row["grant"]) if int(row["holder"]) == self.session else 0,
        }
        return True

    # ---- the rules -------------------------------------------------------------------------------------------------------------

    def _judge_mode(self, row: np.void, before: int, mode: int, requests: int, tripped: set[str]) -> None:
        self._rule(mode in LEGAL[before], "only the transitions of the design happen")
        if mode == MODE_LIVE and before != MODE_LIVE:
            asked = requests & BIT_START != 0 and requests & (STOPS | BIT_RESET) == 0
            self._rule(asked, "motion begins only in a cycle with a start and without a stop, an e-stop or a reset")
            self._rule(not tripped, "motion begins only when no condition is present")
            grant = (self.driver[0], int(self.state["grant"]))  # type: ignore[call-overload]  # an integer
            self._rule(before == MODE_HOLDING or grant not in self.grants, "a motion from ready needs a grant of its own")
            self.grants.add(grant)
            self.grant = grant[1]
        if before == MODE_LATCHED and mode != MODE_LATCHED:
            asked = requests & BIT_RESET != 0 and requests & STOPS == 0
            self._rule(asked, "latched is left only by a reset without a stop")
            still = all(abs(qd) <= self.limits["still_qd"][i] for i, qd in enumerate(self.state["qd"]))  # type: ignore[arg-type]
            self._rule(still, "a reset works only while the arm is still")
            present = tripped - {"grant", "gate", "operator_stop"}
            gone = all(stop_of(name, MODE_LIVE, STOP_NOW) == STOP_NONE for name in present)
            self._rule(gone, "a reset works only when the cause is gone")
        if before in FLOWS and mode in FLOWS and mode != MODE_LIVE:
            self._rule(int(row["stop"]) >= self.stop, "a stop only gets stricter")
        if before == MODE_LATCHED and mode == MODE_LATCHED:
            self._rule(int(row["stop"]) >= self.stop, "a stop only gets stricter")
        if before == MODE_LIVE and requests & STOPS:
            self._rule(mode != MODE_LIVE, "a stop ends the law's charge in the same cycle")
        if requests & BIT_ESTOP:
            answered = (MODE_LATCHED,) if self.limits["estop_stop"] != STOP_FAULT else (MODE_BRAKING, MODE_LATCHED)
            self._rule(mode in answered, "an e-stop brakes or latches in the same cycle, in every mode")
        if mode == MODE_BRAKING and before != MODE_BRAKING:
            self.braking_since_ns = int(row["now_ns"])
        if mode == MODE_BRAKING:
            lasted_ns = int(row["now_ns"]) - self.braking_since_ns
            self._rule(lasted_ns <= max(int(self.limits["brake_deadline_ns"]), 0), "a braking ends by its deadline")

    def _judge_cause(self, row: np.void, before: int, mode: int, requests: int, tripped: set[str]) -> None:
        cause = int(row["first_cause"])
        name = WATCH_NAMES[cause - 1] if cause else "none"
        estop_stop = int(self.limits["estop_stop"])
        ranked = sorted(tripped, key=lambda watch: (-stop_of(watch, before, estop_stop), WATCH_NAMES.index(watch)))
        worst = stop_of(ranked[0], before, estop_stop) if ranked else STOP_NONE
        refused = mode == MODE_LATCHED and worst < STOP_NOW and before != MODE_LATCHED and name == "gate"
        if worst >= STOP_FAULT:
            self._rule(mode in (MODE_BRAKING, MODE_LATCHED), "a fault ends in braking or latched in the same cycle")
            self._rule(worst < STOP_NOW or mode == MODE_LATCHED, "a fault of category 0 releases in the same cycle")
        if self.cause != 0 and mode != MODE_OFF:
            self._rule(cause == self.cause, "the first cause is kept until a reset")
        elif self.cause == 0 and cause != 0:
            self.seen_causes.add(name)
            named = refused or (worst >= STOP_FAULT and name == ranked[0])
            self._rule(named, "the first cause is the strictest condition of the cycle that stopped the arm")
        elif worst >= STOP_FAULT:
            self._rule(cause != 0, "a fault names its cause in the same cycle")
        self._rule((mode == MODE_LATCHED) <= (cause != 0), "latched has a cause")
        self._rule(mode in (MODE_BRAKING, MODE_LATCHED) or cause == 0, "outside braking and latched there is no cause")
        if mode == MODE_LATCHED and before == MODE_LIVE and self.sound_limits:
            self._rule(worst == STOP_NOW, "the arm is released out of live only for a cause of category 0")

    def _judge_signals(self, row: np.void, before: int, mode: int, used: bool) -> None:
        """What the driver said and when, against what the supervisor made of it, without its conditions."""
        drives = int(row["request"]) == REQUEST_DRIVE
        self.without_state = 0 if used else self.without_state + 1
        late_ns = int(row["now_ns"]) - int(row["deadline_ns"]) + int(row["skipped"]) * self.period_ns
        if before in FLOWS:
            self._rule(not (drives and self.foreign), "a state of another arm releases at once")
            if used and self.restarted:
                self._rule(not drives, "a restarted driver gets no torque of the old motion")
            stepped = self.boot_ns is not None and abs(int(row["boot_offset_ns"]) - self.boot_ns) > BOOT_STEP_MAX_NS
            away = late_ns > int(self.limits["valid_for_ns"])
            self._rule(
                not (drives and (stepped or away)), "after a suspend or a cycle later than a torque is valid nothing drives"
            )
        if not drives:
            return
        self._rule(
            self.without_state <= int(self.limits["resend_max"]), "without a new state the torque is resent k times at most"
        )
        if self.without_state:
            begins = before == MODE_READY
            self._rule(begins or self._tau(row) == self.tau, "without a new state the last torque is sent again, unchanged")
        q, qd, status = self.state["q"], self.state["qd"], int(self.state["status"])  # type: ignore[call-overload]
        self._rule(all(map(math.isfinite, [*q, *qd])), "a state with a number that is not finite releases at once")  # type: ignore[misc]
        healthy = status & STATUS_ENABLED and status & STATUS_STOP_CHAIN_CLOSED and not status & STATUS_FAULT
        self._rule(bool(healthy), "torque flows only to a drive that is enabled, without fault, with a closed stop chain")
        self._rule(self.state["grant"] == self.grant != 0, "torque flows only while the driver shows the grant of this motion")
        self._rule(int(row["sent_grant"]) == self.grant, "every torque carries the number of the grant its motion began with")
        self._rule(int(row["answered_sequence"]) == self.driver[1], "every torque answers the newest state that counts")
        if mode == MODE_LIVE:
            low, high, fast = self.limits["q_min"], self.limits["q_max"], self.limits["qd_max"]
            inside = all(low[i] <= q[i] <= high[i] and abs(qd[i]) <= fast[i] for i in range(self.n))  # type: ignore[index]
            self._rule(inside, "the law is in charge only inside the position and speed limits")

    def _tau(self, row: np.void) -> list[float]:
        return [float(row["tau_out"][i]) for i in range(self.n)]

    def _judge_torque(self, row: np.void, before: int, mode: int, used: bool) -> None:
        tau = self._tau(row)
        drives = int(row["request"]) == REQUEST_DRIVE
        self._rule(drives == (mode in FLOWS), "a message drives in live, braking and holding, and in no other mode")
        self._rule(all(map(math.isfinite, tau)), "every torque that leaves is finite")
        self._rule(drives or not any(tau), "a message that does not drive carries no torque")
        if not drives:
            return
        begins = before == MODE_READY
        rate = self.limits["tau_rate_max"] if mode == MODE_LIVE else self.limits["brake_tau_rate_max"]
        for i in range(self.n):
            bound = float(self.limits["tau_max"][i])
            self._rule(abs(tau[i]) <= bound, "no torque is beyond the torque limit")
            if begins:
                share = float(self.limits["hold_margin"]) * bound
                self._rule(abs(tau[i]) <= share, "a motion begins with a holding torque within its share of the limit")
            else:
                step = float(rate[i]) * self.period_ns * 1e-9
                rounding = RATE_ROUNDING * max(abs(tau[i]), abs(self.tau[i]))
                self._rule(abs(tau[i] - self.tau[i]) <= step + rounding, "no torque steps further than the rate of its mode")

    def _judge_record(self, row: np.void, before: int, mode: int, used: bool) -> None:
        margins = row["margins"]
        self._rule(bool(np.all((margins >= 0.0) & (margins <= 1.0))), "every margin is in [0, 1]")
        sequence = int(row["torque_sequence"])
        self._rule(sequence == self.torque_sequence + 1, "torque messages are numbered without a gap or a repetition")
        self.torque_sequence = sequence
        if before == MODE_LIVE and used:
            for i in range(self.n):
                total = 0.0
                for k in range(8):
                    total += float(row["terms"][k, i])
                same = float(row["tau_law"][i]) == total or not math.isfinite(total)
                self._rule(same, "the law's torque is the ordered sum of its recorded terms")
                if mode == MODE_LIVE:
                    good = int(row["law_status"]) == 1 and math.isfinite(float(row["tau_law"][i]))
                    self._rule(good, "the law stays in charge only while it succeeds with finite torques")
