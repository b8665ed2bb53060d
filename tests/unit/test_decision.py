"""The live decision function, walked over every input and every reachable sequence.

Each property is a sentence; a failure prints the shortest sequence of inputs that breaks it.
"""

import ast
import copy
import inspect
import itertools
import textwrap
from collections import deque
from collections.abc import Callable, Iterator
from typing import Any, NamedTuple

import pytest

from rtctl.blocks import (
    ASK_NONE,
    ASK_RESET,
    ASK_START,
    MODE_BRAKING,
    MODE_HOLDING,
    MODE_LATCHED,
    MODE_LIVE,
    MODE_NAMES,
    MODE_OFF,
    MODE_READY,
    STOP_FAULT,
    STOP_HOLD,
    STOP_NAMES,
    STOP_NONE,
    STOP_NOW,
    STOP_RELEASE,
)
from rtctl.supervisor.decision import (
    ACTION_BEGIN,
    ACTION_BRAKE,
    ACTION_CLEAR,
    ACTION_HOLD,
    ACTION_NAMES,
    ACTION_NONE,
    ACTION_RELEASE,
    decide,
)

TORQUE_MODES = (MODE_LIVE, MODE_BRAKING, MODE_HOLDING)
ASKS = ("none", "start", "reset")


class Inputs(NamedTuple):
    stop_now: int
    checks_hold: bool
    still: bool
    cause_gone: bool
    ask: int


class Step(NamedTuple):
    mode: int
    stop: int
    inputs: Inputs
    next_mode: int
    next_stop: int
    action: int

    def __str__(self) -> str:
        given = ", ".join(
            (
                f"stop {STOP_NAMES[self.inputs.stop_now]}",
                f"checks {'hold' if self.inputs.checks_hold else 'fail'}",
                "still" if self.inputs.still else "moving",
                f"cause {'gone' if self.inputs.cause_gone else 'present'}",
                f"ask {ASKS[self.inputs.ask]}",
            )
        )
        return f"{MODE_NAMES[self.mode]} -[{given}]-> {MODE_NAMES[self.next_mode]} ({ACTION_NAMES[self.action]})"


ALL_INPUTS = [Inputs(*values) for values in itertools.product(range(5), (False, True), (False, True), (False, True), range(3))]


def step(mode: int, stop: int, inputs: Inputs, function: Any = decide) -> Step:
    return Step(mode, stop, inputs, *(int(value) for value in function(mode, stop, *inputs)))


Decide = Callable[..., tuple[int, int, int]]


class Reached(NamedTuple):
    """Every (mode, stop) reached from `off` with the shortest path to it, and every step from there."""

    paths: dict[tuple[int, int], tuple[Step, ...]]
    steps: list[Step]


def reach(function: Decide) -> Reached:
    """Walk all inputs from `off` until nothing new is found."""
    paths: dict[tuple[int, int], tuple[Step, ...]] = {(MODE_OFF, STOP_NONE): ()}
    steps = []
    queue = deque(paths)
    while queue:
        here = queue.popleft()
        for inputs in ALL_INPUTS:
            taken = step(*here, inputs, function)
            steps.append(taken)
            there = (taken.next_mode, taken.next_stop)
            if there not in paths:
                paths[there] = (*paths[here], taken)
                queue.append(there)
    return Reached(paths, steps)


REACHED = reach(decide)


def shortest_break(rule: Callable[[Step], bool], reached: Reached = REACHED) -> str:
    """Empty when the rule holds in every reachable step, else the shortest sequence that breaks it."""
    broken = [taken for taken in reached.steps if not rule(taken)]
    if not broken:
        return ""
    worst = min(broken, key=lambda taken: len(reached.paths[(taken.mode, taken.stop)]))
    return "\n".join(str(taken) for taken in (*reached.paths[(worst.mode, worst.stop)], worst))


def only_reset_leaves_latched(s: Step) -> bool:
    if s.mode != MODE_LATCHED or s.next_mode == MODE_LATCHED:
        return True
    return (
        s.inputs.ask == ASK_RESET
        and s.inputs.cause_gone
        and s.inputs.still
        and s.inputs.stop_now < STOP_FAULT
        and s.next_mode == MODE_OFF
    )


def latched_is_left_when_asked_and_allowed(s: Step) -> bool:
    allowed = s.inputs.ask == ASK_RESET and s.inputs.cause_gone and s.inputs.still and s.inputs.stop_now < STOP_FAULT
    return not (s.mode == MODE_LATCHED and allowed) or (s.next_mode == MODE_OFF and s.action == ACTION_CLEAR)


def a_reset_never_starts_motion(s: Step) -> bool:
    return s.inputs.ask != ASK_RESET or s.action != ACTION_BEGIN


def torque_begins_only_by_start_with_all_checks(s: Step) -> bool:
    if s.mode in TORQUE_MODES or s.next_mode not in TORQUE_MODES:
        return True
    i = s.inputs
    return s.mode == MODE_READY and i.ask == ASK_START and i.checks_hold and i.still and i.stop_now == STOP_NONE


def live_is_entered_only_from_ready_or_holding(s: Step) -> bool:
    if s.next_mode != MODE_LIVE or s.mode == MODE_LIVE:
        return True
    i = s.inputs
    return s.mode in (MODE_READY, MODE_HOLDING) and i.ask == ASK_START and i.checks_hold and i.still and i.stop_now == STOP_NONE


def a_start_is_taken_when_nothing_is_against_it(s: Step) -> bool:
    i = s.inputs
    wanted = i.ask == ASK_START and i.checks_hold and i.still and i.stop_now == STOP_NONE
    return not (wanted and s.mode in (MODE_READY, MODE_HOLDING)) or (s.next_mode == MODE_LIVE and s.action == ACTION_BEGIN)


def ready_needs_all_checks(s: Step) -> bool:
    return not (s.next_mode == MODE_READY and s.mode in (MODE_OFF, MODE_READY)) or s.inputs.checks_hold


def a_stop_only_gets_stricter(s: Step) -> bool:
    if s.mode not in TORQUE_MODES and s.mode != MODE_LATCHED:
        return True
    finished = s.action in (ACTION_BEGIN, ACTION_CLEAR) or (s.next_mode == MODE_READY and s.stop <= STOP_RELEASE)
    return finished or s.next_stop >= s.stop


def stop_beats_start(s: Step) -> bool:
    return s.inputs.stop_now == STOP_NONE or s.action != ACTION_BEGIN


def category_0_releases_in_the_same_cycle(s: Step) -> bool:
    if s.mode not in TORQUE_MODES or s.inputs.stop_now != STOP_NOW:
        return True
    return s.next_mode == MODE_LATCHED and s.action == ACTION_RELEASE and s.next_stop == STOP_NOW


def every_stop_ends_the_law(s: Step) -> bool:
    return not (s.mode == MODE_LIVE and s.inputs.stop_now > STOP_NONE) or s.next_mode != MODE_LIVE


def a_fault_never_ends_in_holding_or_ready(s: Step) -> bool:
    in_force = max(s.stop, s.inputs.stop_now)
    if in_force < STOP_FAULT or s.mode not in TORQUE_MODES:
        return True
    return s.next_mode in (MODE_BRAKING, MODE_LATCHED)


def a_fault_in_off_or_ready_latches(s: Step) -> bool:
    return not (s.mode in (MODE_OFF, MODE_READY) and s.inputs.stop_now >= STOP_FAULT) or s.next_mode == MODE_LATCHED


def braking_goes_on_until_still(s: Step) -> bool:
    if s.mode != MODE_BRAKING or s.inputs.still or max(s.stop, s.inputs.stop_now) >= STOP_NOW:
        return True
    return s.next_mode == MODE_BRAKING


def braking_ends_at_rest_as_its_category_says(s: Step) -> bool:
    if s.mode != MODE_BRAKING or not s.inputs.still:
        return True
    ends = {STOP_HOLD: MODE_HOLDING, STOP_RELEASE: MODE_READY, STOP_FAULT: MODE_LATCHED, STOP_NOW: MODE_LATCHED}
    return s.next_mode == ends[max(s.stop, s.inputs.stop_now)]


def torque_is_given_back_whenever_its_modes_end(s: Step) -> bool:
    return not (s.mode in TORQUE_MODES and s.next_mode not in TORQUE_MODES) or s.action == ACTION_RELEASE


def holding_keeps_its_pose_or_ends(s: Step) -> bool:
    if s.mode != MODE_HOLDING or s.action == ACTION_BEGIN or s.inputs.stop_now > STOP_HOLD:
        return True
    return s.next_mode == MODE_HOLDING and s.action == ACTION_NONE


def braking_and_holding_are_entered_with_their_action(s: Step) -> bool:
    entered = s.next_mode != s.mode
    brake = not (entered and s.next_mode == MODE_BRAKING) or s.action == ACTION_BRAKE
    hold = not (entered and s.next_mode == MODE_HOLDING) or s.action == ACTION_HOLD
    return brake and hold


def no_stop_stays_in_force_without_its_mode(s: Step) -> bool:
    free = s.next_mode in (MODE_OFF, MODE_READY, MODE_LIVE)
    return (s.next_stop == STOP_NONE) == free


RULES = [
    value
    for name, value in list(globals().items())
    if callable(value) and list(getattr(value, "__annotations__", {})) == ["s", "return"]
]


@pytest.mark.parametrize("rule", RULES, ids=lambda rule: rule.__name__)
def test_rule_holds_in_every_reachable_step(rule: Callable[[Step], bool]) -> None:
    """Each named sentence holds for every input in every reachable state."""
    broken = shortest_break(rule)
    assert not broken, f"{rule.__name__} is broken by:\n{broken}"


def test_there_are_enough_rules() -> None:
    """The collection of rules above is not empty by accident."""
    assert len(RULES) >= 18


def test_every_mode_is_reached() -> None:
    """All modes can be reached from off, so the rules speak about all of them."""
    assert {mode for mode, _ in REACHED.paths} == set(range(len(MODE_NAMES)))


def test_compiled_equals_interpreted_on_all_inputs() -> None:
    """The compiled function and its source agree on every input, reachable or not."""
    for mode in range(len(MODE_NAMES)):
        for stop in range(len(STOP_NAMES)):
            for inputs in ALL_INPUTS:
                assert step(mode, stop, inputs) == step(mode, stop, inputs, decide.py_func)


def test_the_usual_day() -> None:
    """Off, ready, start, stop, hold, start again, fault, latch, reset, ready: the path a user walks."""
    quiet = Inputs(STOP_NONE, True, True, True, ASK_NONE)
    path = [
        (quiet, MODE_READY),
        (quiet._replace(ask=ASK_START), MODE_LIVE),
        (quiet._replace(still=False, checks_hold=False), MODE_LIVE),
        (quiet._replace(stop_now=STOP_HOLD, still=False, checks_hold=False), MODE_BRAKING),
        (quiet, MODE_HOLDING),
        (quiet._replace(ask=ASK_START), MODE_LIVE),
        (quiet._replace(stop_now=STOP_FAULT, still=False), MODE_BRAKING),
        (quiet, MODE_LATCHED),
        (quiet._replace(ask=ASK_START), MODE_LATCHED),
        (quiet._replace(ask=ASK_RESET), MODE_OFF),
        (quiet, MODE_READY),
    ]
    mode, stop = MODE_OFF, STOP_NONE
    for inputs, expected in path:
        taken = step(mode, stop, inputs)
        assert taken.next_mode == expected, str(taken)
        mode, stop = taken.next_mode, taken.next_stop


# ---- mutation: each guard flipped once; a mutant that no sentence catches is a hole in the sentences ----

FLIPS = {ast.Eq: ast.NotEq, ast.NotEq: ast.Eq, ast.Gt: ast.GtE, ast.GtE: ast.Gt, ast.Lt: ast.LtE, ast.LtE: ast.Lt}


def mutants() -> Iterator[tuple[str, Decide]]:
    """The decision function with one comparison flipped, one `and`/`or` swapped, one condition dropped or one `not` removed."""
    source = textwrap.dedent(inspect.getsource(decide.py_func)).split("\n", 1)[1]
    tree = ast.parse(source)
    namespace = vars(inspect.getmodule(decide.py_func))
    nodes = list(ast.walk(tree))
    for k, node in enumerate(nodes):
        for label, change in changes(node):
            mutated = copy.deepcopy(tree)
            change(list(ast.walk(mutated))[k])
            scope = dict(namespace)
            exec(compile(ast.fix_missing_locations(mutated), "<mutant>", "exec"), scope)  # our own function, changed once
            yield f"line {node.lineno}: {label} in `{ast.unparse(node)}`", scope["decide"]


def changes(node: ast.AST) -> list[tuple[str, Callable[[Any], None]]]:
    """What may be changed in this node, one thing at a time."""
    found: list[tuple[str, Callable[[Any], None]]] = []
    if isinstance(node, ast.Compare) and type(node.ops[0]) in FLIPS:
        found.append(("comparison flipped", lambda n: n.ops.__setitem__(0, FLIPS[type(n.ops[0])]())))
    if isinstance(node, ast.BoolOp):
        other = ast.Or if isinstance(node.op, ast.And) else ast.And
        found.append(("and/or swapped", lambda n: setattr(n, "op", other())))
        for k in range(len(node.values)):
            found.append(
                (f"condition {k + 1} dropped", lambda n, k=k: n.values.__setitem__(k, ast.Constant(isinstance(n.op, ast.And))))
            )
    if isinstance(node, ast.If) and isinstance(node.test, ast.UnaryOp):
        found.append(("not removed", lambda n: setattr(n, "test", n.test.operand)))
    return found


def same(function: Decide) -> bool:
    """True when the mutant gives the same answer in every reachable state for every input: it is the same function there."""
    return all(step(taken.mode, taken.stop, taken.inputs, function) == taken for taken in REACHED.steps)


def test_every_mutant_of_a_guard_is_caught_by_a_sentence() -> None:
    """Each flipped or dropped guard breaks at least one named sentence, unless it changes no reachable answer at all."""
    count, missed = 0, []
    for label, mutant in mutants():
        count += 1
        reached = reach(mutant)
        if not any(shortest_break(rule, reached) for rule in RULES) and not same(mutant):
            missed.append(label)
    assert count >= 40
    assert not missed, "not caught:\n" + "\n".join(missed)
