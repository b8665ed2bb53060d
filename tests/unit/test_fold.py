"""Fold and requests: from conditions to one stop and its first cause."""

import itertools

from rtctl.blocks import (
    ASK_NONE,
    ASK_RESET,
    ASK_START,
    BIT_ESTOP,
    BIT_RESET,
    BIT_START,
    BIT_STOP,
    BIT_STOP_RELEASE,
    MODE_BRAKING,
    MODE_HOLDING,
    MODE_LATCHED,
    MODE_LIVE,
    MODE_NAMES,
    MODE_OFF,
    MODE_READY,
    STOP_FAULT,
    STOP_HOLD,
    STOP_NONE,
    STOP_NOW,
    STOP_RELEASE,
    WATCH_BRAKE_DEADLINE,
    WATCH_COUNT,
    WATCH_ESTOP,
    WATCH_GRANT,
    WATCH_LATE_CYCLES,
    WATCH_NAMES,
    WATCH_OPERATOR_STOP,
    WATCH_STATE_AGE,
    WATCH_TRACKING_ERROR,
)
from rtctl.causes import CAUSES, cause
from rtctl.supervisor.fold import ACTS, fold, resolve_requests

MODES = range(len(MODE_NAMES))


def test_every_watch_has_a_cause_of_its_name() -> None:
    """The cause code of watch w is w + 1, and the table of causes has no other entries."""
    assert [entry.name for entry in CAUSES[1:]] == list(WATCH_NAMES)
    assert all(entry.sentence and entry.likely and entry.next for entry in CAUSES[1:])


def test_no_condition_means_no_stop() -> None:
    """With nothing tripped there is no stop in any mode."""
    assert {fold(0, mode, 0, STOP_FAULT) for mode in MODES} == {(STOP_NONE, 0)}


def test_a_single_condition_gives_its_own_cause() -> None:
    """Each watch alone gives the stop of the table and its own cause code."""
    for w, mode in itertools.product(range(WATCH_COUNT), MODES):
        stop, code = fold(1 << w, mode, 0, STOP_FAULT)
        assert stop == ACTS[w, mode]
        assert code == (w + 1 if stop > STOP_NONE else 0)


def test_the_worst_category_wins_and_names_its_first_cause() -> None:
    """With a category 1 and two category 0 conditions the cause is the first of category 0."""
    bits = (1 << WATCH_TRACKING_ERROR) | (1 << WATCH_STATE_AGE) | (1 << WATCH_GRANT)
    assert fold(bits, MODE_LIVE, 0, STOP_FAULT) == (STOP_NOW, WATCH_STATE_AGE + 1)
    assert cause(WATCH_STATE_AGE + 1).name == "state_age"


def test_fold_agrees_with_a_plain_maximum_over_all_pairs() -> None:
    """Over all pairs of conditions and all modes, fold equals the maximum of the table, first index first."""
    for a, b, mode in itertools.product(range(WATCH_COUNT), range(WATCH_COUNT), MODES):
        ranked = sorted({a, b}, key=lambda w: (-int(ACTS[w, mode]), w))
        stop = int(ACTS[ranked[0], mode])
        assert fold((1 << a) | (1 << b), mode, 0, STOP_FAULT) == (stop, ranked[0] + 1 if stop else 0)


def test_estop_acts_in_every_mode_with_the_category_of_the_limits_file() -> None:
    """An e-stop is category 0 or 1, never 2 (IEC 60204-1), in all modes; an unknown setting counts as category 0."""
    for mode in MODES:
        assert fold(1 << WATCH_ESTOP, mode, BIT_ESTOP, STOP_FAULT)[0] == STOP_FAULT
        assert fold(1 << WATCH_ESTOP, mode, BIT_ESTOP, STOP_NOW)[0] == STOP_NOW
        assert fold(1 << WATCH_ESTOP, mode, BIT_ESTOP, 0)[0] == STOP_NOW


def test_operator_stop_holds_or_releases_as_asked() -> None:
    """A stop request is category 2 by default and category 1 by option, and only where torque flows."""
    for mode in (MODE_LIVE, MODE_BRAKING, MODE_HOLDING):
        assert fold(1 << WATCH_OPERATOR_STOP, mode, BIT_STOP, STOP_FAULT)[0] == STOP_HOLD
        assert fold(1 << WATCH_OPERATOR_STOP, mode, BIT_STOP_RELEASE, STOP_FAULT)[0] == STOP_RELEASE
    for mode in (MODE_OFF, MODE_READY, MODE_LATCHED):
        assert fold(1 << WATCH_OPERATOR_STOP, mode, BIT_STOP, STOP_FAULT)[0] == STOP_NONE


def test_watches_of_motion_do_not_interrupt_a_stop() -> None:
    """Tracking error stops the law but not the braking; the braking deadline acts in braking alone."""
    assert fold(1 << WATCH_TRACKING_ERROR, MODE_BRAKING, 0, STOP_FAULT)[0] == STOP_NONE
    assert [int(fold(1 << WATCH_BRAKE_DEADLINE, mode, 0, STOP_FAULT)[0]) for mode in MODES] == [0, 0, 0, STOP_NOW, 0, 0]
    assert fold(1 << WATCH_LATE_CYCLES, MODE_BRAKING, 0, STOP_FAULT)[0] == STOP_FAULT


def test_requests_are_resolved_stop_first_then_reset_then_start() -> None:
    """Over all combinations of request bits: a stop beats all, a reset beats a start."""
    for bits in range(32):
        asked = resolve_requests(bits)
        if bits & (BIT_STOP | BIT_STOP_RELEASE | BIT_ESTOP):
            assert asked == ASK_NONE
        elif bits & BIT_RESET:
            assert asked == ASK_RESET
        else:
            assert asked == (ASK_START if bits & BIT_START else ASK_NONE)
