"""The driver template in C for tests: built with gcc, as a program and as a library whose rules a test can call one by one.

The library is `drivers/template.c` unchanged, with a few functions behind it that let Python reach its static ones. Messages are
handed to it at the very end of a readable page, so that one byte read beyond a message ends the process.
"""

import ctypes
import re
import subprocess
from collections import Counter
from pathlib import Path
from typing import Any

from drivers.template import HISTORY
from rtctl.kernels.external import zmq_library_candidates
from tests.structure.sources_of import TOP

TEMPLATE = TOP / "drivers/template.c"
STRICT = ("-std=c11", "-Wall", "-Wextra", "-Werror", "-O2", "-DRTCTL_NO_ZMQ_HEADER")
TRAPS = ("-fsanitize=undefined", "-fsanitize-undefined-trap-on-error")  # no run-time library needed

HARNESS = """
#define main template_main
#include "template.c"
#undef main
#include <sys/mman.h>

static const uint8_t *guarded(const uint8_t *data, size_t size) {
    static uint8_t *pages;
    size_t page = (size_t)sysconf(_SC_PAGESIZE);
    if (!pages) {
        pages = mmap(NULL, 2 * page, PROT_READ | PROT_WRITE, MAP_PRIVATE | MAP_ANONYMOUS, -1, 0);
        if (pages == MAP_FAILED || mprotect(pages + page, page, PROT_NONE)) abort();
    }
    return memcpy(pages + page - size, data, size);
}

Duty *duty_new(uint64_t session, int64_t now_ns) {
    Duty *d = calloc(1, sizeof *d);
    d->session = session, d->phase_ns = d->moved_ns = now_ns;
    return d;
}
void duty_free(Duty *d) { free(d); }
uint64_t arm_key(void) { return ARM_KEY; }
const char *reason(int why) { return REASON[why]; }
void clock_at(int64_t now_ns) { start_ns = 0, start_ns = now() - now_ns; }
void duty_drain(Duty *d, void *socket) { drain(socket, d); }

int duty_receive(Duty *d, const uint8_t *data, size_t size, int64_t now_ns, int only_release) {
    return receive(d, guarded(data, size), size, now_ns, only_release);
}
int duty_step(Duty *d, const double *q, const double *qd, uint64_t status, int64_t now_ns, double *tau) {
    return step(d, q, qd, status, now_ns, tau);
}
size_t duty_state(Duty *d, const double *q, const double *qd, const double *tau, int count, int64_t sample_ns, uint8_t *out) {
    Writer w;
    write_state(d, q, qd, tau, count, sample_ns, &w);
    memcpy(out, w.data, w.size);
    return w.size;
}
uint64_t *duty_counters(Duty *d) { return &d->session; }
int64_t *duty_samples(Duty *d) { return d->sample_ns; }
int64_t *duty_deadline(Duty *d) { return &d->deadline_ns; }
const char *duty_phase(const Duty *d) { return (const char *[]){"moving", "closing", "still", "drive"}[d->phase]; }
uint64_t duty_refused(const Duty *d, int why) { return d->refused[why]; }

int torque_read(const uint8_t *data, size_t size, uint64_t counters[8], double tau[N]) {
    Torque t;
    int why = read_torque(guarded(data, size), size, &t);
    if (why == COUNTS) memcpy(counters, &t.key, 8 * sizeof *counters), memcpy(tau, t.tau, sizeof t.tau);
    return why;
}
"""
COUNTERS = (  # of a Duty, in the order of its fields
    "session",
    "sequence",
    "holder",
    "grant",
    "received_session",
    "received_sequence",
    "applied_session",
    "applied_sequence",
    "status",
)


def compile_c(folder: Path, *options: str) -> None:
    """One gcc line against pyzmq's own libzmq. Raises with gcc's words."""
    library = zmq_library_candidates()
    link = [str(library[0]), f"-Wl,-rpath,{library[0].parent}"] if library else ["-lzmq"]
    done = subprocess.run(["gcc", *STRICT, *options, *link], cwd=folder, capture_output=True, text=True)
    assert done.returncode == 0, done.stderr


def build_program(folder: Path) -> Path:
    """The template as it stands, as a program."""
    compile_c(folder, "-o", "driver", str(TEMPLATE))
    return folder / "driver"


class Library:
    """The template's functions for an arm of `n` joints: only the table of numbers is changed, as its user would."""

    def __init__(self, folder: Path, n: int = 1) -> None:
        text = TEMPLATE.read_text()
        text, changed = re.subn(r"^#define N 1 ", f"#define N {n} ", text, flags=re.M)
        text, arrays = re.subn(r"\[N\] = \{([0-9.]+)\};", lambda found: f"[N] = {{{', '.join([found[1]] * n)}}};", text)
        assert (changed, arrays) == (1, 4)
        place = folder / f"joints{n}"
        place.mkdir()
        (place / "template.c").write_text(text)
        (place / "harness.c").write_text(HARNESS)
        compile_c(place, *TRAPS, "-shared", "-fPIC", "-o", "harness.so", "harness.c")
        self.n = n
        self.calls = ctypes.CDLL(str(place / "harness.so"))
        self._declare()
        self.key = int(self.calls.arm_key())

    def _declare(self) -> None:
        pointer, word, sword, size = ctypes.c_void_p, ctypes.c_uint64, ctypes.c_int64, ctypes.c_size_t
        number, integer, text = ctypes.POINTER(ctypes.c_double), ctypes.c_int, ctypes.c_char_p
        for name, result, arguments in (
            ("duty_new", pointer, (word, sword)),
            ("duty_free", None, (pointer,)),
            ("arm_key", word, ()),
            ("reason", text, (integer,)),
            ("clock_at", None, (sword,)),
            ("duty_drain", None, (pointer, pointer)),
            ("duty_receive", integer, (pointer, text, size, sword, integer)),
            ("duty_step", integer, (pointer, number, number, word, sword, number)),
            ("duty_state", size, (pointer, number, number, number, integer, sword, text)),
            ("duty_counters", ctypes.POINTER(word), (pointer,)),
            ("duty_samples", ctypes.POINTER(sword), (pointer,)),
            ("duty_deadline", ctypes.POINTER(sword), (pointer,)),
            ("duty_phase", text, (pointer,)),
            ("duty_refused", word, (pointer, integer)),
            ("torque_read", integer, (text, size, ctypes.POINTER(word), number)),
        ):
            function = getattr(self.calls, name)
            function.restype, function.argtypes = result, arguments

    def numbers(self, values: Any) -> Any:
        """A C array of the joints' values."""
        return (ctypes.c_double * self.n)(*values)

    def reason(self, why: int) -> str:
        """Name of a verdict."""
        return str(self.calls.reason(why).decode())

    def read_torque(self, data: bytes) -> tuple[str, list[int], list[float]]:
        """(verdict, eight counters, torques) of a message."""
        counters, tau = (ctypes.c_uint64 * 8)(), self.numbers([0.0] * self.n)
        why = self.calls.torque_read(data, len(data), counters, tau)
        return self.reason(why), list(counters), list(tau)


class CDuty:
    """A driver's duty in C, with the names that `drivers.template.Duty` has."""

    library: Library  # set before use

    def __init__(self, session: int, now_ns: int) -> None:
        self.calls = self.library.calls
        self.address = self.calls.duty_new(session, now_ns)
        self.key = self.library.key
        self.refused: Counter[str] = Counter()

    def __del__(self) -> None:
        self.calls.duty_free(self.address)

    def counter(self, name: str) -> int:
        """A counter of its memory."""
        return int(self.calls.duty_counters(self.address)[COUNTERS.index(name)])

    def set_counters(self, **values: int) -> None:
        """Write counters into its memory."""
        for name, value in values.items():
            self.calls.duty_counters(self.address)[COUNTERS.index(name)] = value

    sequence = property(lambda self: self.counter("sequence"))
    holder = property(lambda self: self.counter("holder"))
    grant = property(lambda self: self.counter("grant"))
    received = property(lambda self: (self.counter("received_session"), self.counter("received_sequence")))
    phase = property(lambda self: self.calls.duty_phase(self.address).decode())
    sample_ns = property(lambda self: self.calls.duty_samples(self.address)[:HISTORY])

    @property
    def deadline_ns(self) -> int:
        """Until when the last torque counts."""
        return int(self.calls.duty_deadline(self.address)[0])

    @deadline_ns.setter
    def deadline_ns(self, value: int) -> None:
        self.calls.duty_deadline(self.address)[0] = value

    def receive(self, data: bytes, now_ns: int, only_release: bool = False) -> bool:
        """Take one message; True if it counts."""
        why = self.calls.duty_receive(self.address, data, len(data), now_ns, only_release)
        if why:
            self.refused[self.library.reason(why)] += 1
        return bool(why == 0)

    def step(self, q: list[float], qd: list[float], status: int, now_ns: int) -> tuple[list[float], bool]:
        """One bus cycle: (torques to write, brakes must be closed)."""
        numbers = self.library.numbers
        tau = numbers([0.0] * self.library.n)
        closed = self.calls.duty_step(self.address, numbers(q), numbers(qd), status, now_ns, tau)
        return list(tau), bool(closed)

    def state(self, q: list[float], qd: list[float], tau: list[float], sample_ns: int) -> bytes:
        """The next state message."""
        numbers, out = self.library.numbers, ctypes.create_string_buffer(1024)
        measured = numbers(tau or [0.0] * self.library.n)
        size = self.calls.duty_state(self.address, numbers(q), numbers(qd), measured, len(tau), sample_ns, out)
        return out.raw[:size]

    def drain(self, socket: Any, now_ns: int) -> None:
        """Take what waits in a socket of pyzmq, at a time by hand."""
        self.calls.clock_at(now_ns)
        self.calls.duty_drain(self.address, socket.underlying)

    def verdicts(self) -> dict[str, int]:
        """How many messages got each verdict, by its own count."""
        names = [self.library.reason(k) for k in range(15)]
        counts = {name: int(self.calls.duty_refused(self.address, k)) for k, name in enumerate(names)}
        return {name: count for name, count in counts.items() if count}
