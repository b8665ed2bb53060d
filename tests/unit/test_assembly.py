"""From a run file to the blocks of the cycle."""

from dataclasses import replace
from types import MappingProxyType

import numpy as np
import pytest

from rtctl.assembly import SESSION_END, assemble
from rtctl.config.run_file import Waypoints
from rtctl.errors import ConfigError
from tests.lockstep_runs import demo


def test_blocks_hold_what_the_files_say() -> None:
    """Model, limits, period and session arrive in SETUP; each law has its POINTERS with its own number."""
    run = demo()
    assembly = assemble(run, others=("pid",), session=5)
    assert assembly.law == run.law
    assert list(assembly.pointers) == ["computed_torque", "pid"]
    assert [int(assembly.pointers[law]["law_index"]) for law in assembly.pointers] == [0, 1]
    assert int(assembly.setup["session"]) == 5
    assert int(assembly.setup["period_ns"]) == 1_000_000
    assert assembly.setup["limits"].tobytes() == run.limits.tobytes()
    assert assembly.setup["model"].tobytes() == run.arm.model.tobytes()
    assert assembly.term_names["pid"] == ["p", "d", "i"]
    assert int(assembly.pointers["pid"]["law_term_count"]) == 3
    assert len({int(block["law"]) for block in assembly.pointers.values()}) == 2


def test_every_run_gets_a_session_of_its_own() -> None:
    """Random, not 0, below 2^53: two controllers are told apart."""
    sessions = {int(assemble(demo()).setup["session"]) for _ in range(5)}
    assert len(sessions) == 5
    assert all(0 < session < SESSION_END for session in sessions)


def test_an_unknown_law_names_the_nearest() -> None:
    """The text names the run file, the laws there are and the nearest."""
    with pytest.raises(ConfigError, match=r"demo\.toml.*computed_torque"):
        assemble(demo(), "computed_torqe")


def test_all_problems_of_laws_and_reference_come_at_once() -> None:
    """Missing gains, wrong gains and a missing file of waypoints: three findings, each with the run file."""
    run = demo()
    gains = {name: table for name, table in run.gains.items() if name != "pd"}
    gains["pid"] = MappingProxyType({"kp_nm_rad": -1.0})
    run = replace(run, gains=MappingProxyType(gains), reference=Waypoints(kind="waypoints", file="nowhere.csv"))
    with pytest.raises(ConfigError) as caught:
        assemble(run, "pd", others=("pid",))
    text = str(caught.value)
    assert "gains.pd: must be a table with the gains of the law, got nothing. Add [gains.pd]." in text
    assert "gains.pid.kp_nm_rad" in text
    assert "nowhere.csv" in text
    assert all(finding.where.startswith(str(run.path)) for finding in caught.value.findings)


def test_a_motion_that_leaves_the_limits_is_found_before_the_start() -> None:
    """From the run's own start pose nothing is wrong; with tighter speed limits the first offending joint is named."""
    run = demo()
    assembly = assemble(run)
    q_start = np.asarray(run.sim.q_start)
    assert assembly.start_faults(q_start) == []
    tight = run.limits.copy()
    tight["qd_max"][:6] = 0.1
    faults = assemble(replace(run, limits=tight)).start_faults(q_start)
    assert faults
    assert "waist" in str(faults[0]) or "joint 1" in str(faults[0])
