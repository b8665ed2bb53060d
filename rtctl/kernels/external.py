"""Functions of libc and libzmq, called by name from compiled code, and the hot helpers for clock, sleep and sockets.

Functions that are called by name can be kept in the compile cache, unlike pointers. A name that is missing would end the process
without a word, so `load_libraries` must have succeeded before anything here is compiled or taken from the cache.
Integers that hold addresses are int64 everywhere: numba turns a mix of int64 and uint64 into float64.
"""

import functools
from pathlib import Path
from typing import Any

import numpy as np
from numba.core import types

from rtctl.errors import SetupError
from rtctl.kernels.compile import hot
from rtctl.kernels.layout import OK
from rtctl.kernels.memory import address_of, array_at

_INT, _WORD = types.int32, types.int64  # C int; pointer, size_t and long on 64-bit Linux

clock_gettime = types.ExternalFunction("clock_gettime", _INT(_INT, _WORD))
clock_nanosleep = types.ExternalFunction("clock_nanosleep", _INT(_INT, _INT, _WORD, _WORD))
ppoll = types.ExternalFunction("ppoll", _INT(_WORD, _WORD, _WORD, _WORD))
zmq_recv = types.ExternalFunction("zmq_recv", _INT(_WORD, _WORD, _WORD, _INT))
zmq_send = types.ExternalFunction("zmq_send", _INT(_WORD, _WORD, _WORD, _INT))
zmq_getsockopt = types.ExternalFunction("zmq_getsockopt", _INT(_WORD, _INT, _WORD, _WORD))
zmq_errno = types.ExternalFunction("zmq_errno", _INT())
errno_location = types.ExternalFunction("__errno_location", _WORD())

NAMES = (
    "clock_gettime",
    "clock_nanosleep",
    "ppoll",
    "zmq_recv",
    "zmq_send",
    "zmq_getsockopt",
    "zmq_errno",
    "__errno_location",
)

CLOCK_MONOTONIC = 1
CLOCK_BOOTTIME = 7
TIMER_ABSTIME = 1
POLLIN = 1
EINTR = 4
EAGAIN = 11
ZMQ_DONTWAIT = 1
ZMQ_RCVMORE = 13
ZMQ_FD = 14
ZMQ_EVENTS = 15
ZMQ_POLLIN = 1
ZMQ_VERSION_MIN = (4, 3, 5)

RETRIES = 16  # of a call that a signal interrupted: bounded, like every loop in the cycle

NS_PER_S = 1_000_000_000

EXTERNAL_SCRATCH = np.dtype(  # what the C functions read and write; one block per thread
    [
        ("ts", "i8", 2),  # struct timespec
        ("poll_fd", "i4"),  # struct pollfd
        ("poll_events", "i2"),
        ("poll_revents", "i2"),
        ("option", "i8"),  # value of a socket option (a C int), and its size
        ("option_size", "i8"),
    ],
    align=True,
)
assert EXTERNAL_SCRATCH.itemsize == 40  # no padding: struct pollfd is 8 bytes

# ---- loading, cold ---------------------------------------------------------------------------------------------------------------


def zmq_library_candidates() -> list[Path]:
    """Files that may be pyzmq's own libzmq, the mapped one first: a second copy would not know the sockets of the first.

    A wheel brings it beside the package; a pyzmq of the system links it from the linker's path, which shows once it is imported.
    """
    import zmq

    maps = Path("/proc/self/maps").read_text(encoding="utf-8", errors="replace")
    mapped = [Path(line.split(maxsplit=5)[-1]) for line in maps.splitlines() if "/" in line]
    package = Path(zmq.__file__).parent
    beside = [*sorted(package.parent.glob("pyzmq.libs/libzmq*")), *sorted(package.glob("libzmq*.so*"))]
    return [path for path in dict.fromkeys(mapped) if path.name.startswith("libzmq")] + beside


@functools.cache
def load_libraries() -> str:
    """Make every name of `NAMES` known to compiled code. Returns the path of libzmq ("" if it is part of pyzmq's module).

    Raises SetupError when a name is missing or libzmq is too old: compiled code would end the process without a word.
    """
    import llvmlite.binding as llvm
    import zmq

    version = zmq.zmq_version_info()
    if version < ZMQ_VERSION_MIN:
        raise SetupError(
            f"libzmq: version must be >= {'.'.join(map(str, ZMQ_VERSION_MIN))}, got {zmq.zmq_version()}. "
            "Install a newer one: pip install --upgrade pyzmq"
        )
    loaded = ""
    candidates = zmq_library_candidates()
    if candidates:
        loaded = str(candidates[0].resolve())
    else:
        # libzmq linked statically into pyzmq's extension module: its names may still be visible there.
        import zmq.backend.cython._zmq as module  # type: ignore[import-not-found,unused-ignore]  # no stubs for it

        loaded = str(module.__file__)
    llvm.load_library_permanently(loaded)
    missing = [name for name in NAMES if not llvm.address_of_symbol(name)]
    if missing:
        raise SetupError(
            f"libzmq and libc: must provide {', '.join(NAMES)}, got no {', '.join(missing)} (looked in {loaded}). "
            "Install pyzmq from its wheel: pip install --force-reinstall --only-binary :all: pyzmq"
        )
    return loaded


def zmq_socket_address(socket: Any) -> int:
    """Address of a pyzmq socket for the functions here. While compiled code uses it, nothing else may."""
    return int(socket.underlying)


# ---- hot helpers -----------------------------------------------------------------------------------------------------------------


@hot
def errno_now(scratch):  # type: ignore[no-untyped-def]
    """errno of the last failed call of this thread. `scratch` is not used; it keeps the call from being moved."""
    return int(array_at(errno_location(), 1, np.int32)[0])


@hot
def now_ns(clock, scratch):  # type: ignore[no-untyped-def]
    """Time of a clock (CLOCK_MONOTONIC, CLOCK_BOOTTIME) in ns; -1 if the clock cannot be read."""
    ts = scratch["ts"]
    if clock_gettime(clock, address_of(scratch)) != 0:
        return -1
    return ts[0] * NS_PER_S + ts[1]


@hot
def sleep_until_ns(deadline_ns, scratch):  # type: ignore[no-untyped-def]
    """Sleep until CLOCK_MONOTONIC reaches the deadline; at once if it is past. Signals do not shorten it. Returns OK or -errno."""
    ts = scratch["ts"]
    ts[0] = deadline_ns // NS_PER_S
    ts[1] = deadline_ns % NS_PER_S
    status = 0
    for _ in range(RETRIES):
        status = clock_nanosleep(CLOCK_MONOTONIC, TIMER_ABSTIME, address_of(scratch), 0)
        if status != EINTR:
            break
    return OK if status == 0 else -status


@hot
def wait_readable(descriptor, timeout_ns, scratch):  # type: ignore[no-untyped-def]
    """Wait until a file descriptor is readable. Returns 1 readable, 0 time-out or signal, -errno on failure."""
    scratch["ts"][0] = timeout_ns // NS_PER_S
    scratch["ts"][1] = timeout_ns % NS_PER_S
    scratch["poll_fd"] = descriptor
    scratch["poll_events"] = POLLIN
    scratch["poll_revents"] = 0
    count = ppoll(address_of(scratch) + 16, 1, address_of(scratch), 0)
    if count >= 0:
        return count
    error = errno_now(scratch)
    return 0 if error == EINTR else -error


@hot
def socket_option(socket, option, scratch):  # type: ignore[no-untyped-def]
    """An integer option of a socket (ZMQ_RCVMORE, ZMQ_EVENTS, ZMQ_FD); -errno on failure. Works off the socket's own messages."""
    for _ in range(RETRIES):
        scratch["option"] = 0
        scratch["option_size"] = 4  # sizeof(int); little-endian, so the 64-bit word holds its value
        if zmq_getsockopt(socket, option, address_of(scratch) + 24, address_of(scratch) + 32) == 0:
            return scratch["option"]
        error = zmq_errno()
        if error != EINTR:
            return -error
    return -EINTR


@hot
def receive_bytes(socket, buffer):  # type: ignore[no-untyped-def]
    """One message into `buffer` (uint8), without waiting. Returns its full length, even if longer than the buffer; else -errno.

    -EAGAIN: nothing there. The length is that of the message: what exceeds the buffer is lost.
    """
    for _ in range(RETRIES):
        length = zmq_recv(socket, buffer.ctypes.data, buffer.size, ZMQ_DONTWAIT)
        if length >= 0:
            return length
        error = zmq_errno()
        if error != EINTR:
            return -error
    return -EINTR


@hot
def send_bytes(socket, buffer, length):  # type: ignore[no-untyped-def]
    """Send the first `length` bytes of `buffer` as one message, without waiting. Returns OK or -errno (-EAGAIN: queue full)."""
    for _ in range(RETRIES):
        if zmq_send(socket, buffer.ctypes.data, length, ZMQ_DONTWAIT) >= 0:
            return OK
        error = zmq_errno()
        if error != EINTR:
            return -error
    return -EINTR
