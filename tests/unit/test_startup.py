"""What is done before the first cycle."""

import numpy as np
import pytest
import zmq

from rtctl.errors import SetupError
from rtctl.loop import startup
from rtctl.loop.live import run_loop
from rtctl.loop.startup import HotLink, compile_loop, compiled_signatures, warm_up
from tests.loop_stand import plan_of


def test_the_warm_up_runs_the_loop_and_compiles_nothing_more() -> None:
    """After the compile, 200 cycles on throw-away blocks leave the set of compiled variants as it was."""
    compile_loop()
    plan = plan_of("ipc:///tmp/a", "ipc:///tmp/b")
    with zmq.Context() as context:
        warm_up(plan, context)
        before = compiled_signatures()
        warm_up(plan, context)
    assert compiled_signatures() == before
    assert before["rtctl.loop.live.run_loop"] == len(run_loop.signatures) == 1


def test_a_warm_up_that_does_not_come_to_its_end_is_refused(monkeypatch: pytest.MonkeyPatch) -> None:
    """A loop that returns early would compile in the first cycle of the run: it is not started."""
    monkeypatch.setattr(startup, "run_loop", lambda *blocks: 0)
    plan = plan_of("ipc:///tmp/a", "ipc:///tmp/b")
    with (
        zmq.Context() as context,
        pytest.raises(SetupError, match="warm-up: must run 200 cycles without compiling, got 0 cycles"),
    ):
        warm_up(plan, context)


def test_hot_sockets_keep_no_old_messages() -> None:
    """Queue limit 4, linger 0, no queue to peers that are not there, a bound on the message: by the sockets' own word."""
    link = HotLink(plan_of("ipc:///tmp/rtctl-test-a", "ipc:///tmp/rtctl-test-b"), None, None)
    try:
        assert link.state_socket.getsockopt(zmq.RCVHWM) == 4
        assert link.torque_socket.getsockopt(zmq.SNDHWM) == 4
        assert link.torque_socket.getsockopt(zmq.IMMEDIATE) == 1
        assert link.state_socket.getsockopt(zmq.MAXMSGSIZE) == 1024
        assert {socket.getsockopt(zmq.LINGER) for socket in (link.state_socket, link.torque_socket)} == {0}
        with pytest.raises(zmq.Again):
            link.torque_socket.send(b"x", zmq.DONTWAIT)
    finally:
        link.close()


def test_an_endpoint_that_cannot_be_is_one_message() -> None:
    """A transport unknown to libzmq, named with what was expected."""
    with pytest.raises(
        SetupError, match="must be endpoints that can be connected to, got .* Check the endpoints in the run file"
    ):
        HotLink(plan_of("nothing://x", "ipc:///tmp/b"), None, None)
    assert np.isfinite(startup.WARM_CYCLES)
