"""Which endpoints a live loop accepts."""

from dataclasses import replace

import pytest

from rtctl.errors import ConfigError
from rtctl.loop.plan import CurveKeys, check_endpoints
from tests.loop_stand import plan_of


def test_local_sockets_are_accepted() -> None:
    """ipc and inproc need no keys."""
    check_endpoints(plan_of("ipc:///tmp/a", "inproc://b"))


def test_every_fault_of_the_endpoints_is_said_at_once() -> None:
    """A network without keys, an unknown transport, an unknown pacing: three sentences."""
    plan = replace(plan_of("tcp://127.0.0.1:5000", "udp://x"), pacing="clock")
    with pytest.raises(ConfigError) as caught:
        check_endpoints(plan)
    assert str(caught.value).splitlines() == [
        "state endpoint: must be encrypted when it is reached over a network, got tcp://127.0.0.1:5000 without keys. "
        "Add the CURVE keys of both sides, or use ipc:// on this computer.",
        "torque endpoint: must be ipc://PATH or tcp://HOST:PORT, got udp://x.",
        "pacing: must be timer or state, got clock.",
    ]


def test_a_path_too_long_for_a_local_socket_is_named() -> None:
    """libzmq would cut or refuse it without saying why."""
    with pytest.raises(ConfigError, match="a path of at most 107 bytes, got 201 bytes"):
        check_endpoints(plan_of("ipc:///" + "x" * 200, "ipc:///tmp/b"))


def test_with_keys_a_network_is_accepted() -> None:
    """Encrypted with the keys of both sides."""
    keys = CurveKeys("a" * 40, "b" * 40, "c" * 40)
    check_endpoints(replace(plan_of("tcp://127.0.0.1:5000", "tcp://127.0.0.1:5001"), curve=keys))
