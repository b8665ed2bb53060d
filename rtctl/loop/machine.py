"""What the computer permits: cores, real-time priority, processor latency, locked memory; and what to run where it does not.

Every function here tries and reports; none fails a start. The loop then runs without, and the report says so.
"""

import ctypes
import os
import signal
import struct
import threading
from pathlib import Path

from rtctl.errors import ConfigError, Finding

LATENCY_FILE = Path("/dev/cpu_dma_latency")
LIMITS_FILE = "/etc/security/limits.d/rtctl.conf"
MCL_CURRENT, MCL_FUTURE = 1, 2
CAP_IPC_LOCK = 14
MEMORY_SHARE = 0.5  # of the free memory that locking may take


def choose_cores(wanted: int | None) -> tuple[int | None, int | None, list[Finding]]:
    """(core of the hot thread, core of its I/O thread, findings). The I/O thread gets another core than the loop."""
    allowed = sorted(os.sched_getaffinity(0))
    if wanted is not None and wanted not in allowed:
        raise ConfigError.from_findings(
            [
                Finding(
                    "loop core",
                    f"one of {', '.join(map(str, allowed))}",
                    str(wanted),
                    next="Name a core this process may use.",
                )
            ]
        )
    if len(allowed) < 2:
        finding = Finding(
            "processor cores",
            "two or more",
            "one",
            "The loop shares its core with everything else.",
            "Give this process more cores.",
            "warn",
        )
        return None, None, [finding]
    hot = wanted if wanted is not None else allowed[-1]
    return hot, [core for core in allowed if core != hot][-1], []


def fifo_permitted(priority: int) -> bool:
    """May this process use SCHED_FIFO? Tried by a thread that ends at once, so that nothing inherits it."""
    result: list[bool] = []
    thread = threading.Thread(target=lambda: result.append(_set_fifo(priority)), name="rtctl-probe")
    thread.start()
    thread.join()
    return result[0]


def _set_fifo(priority: int) -> bool:
    try:
        os.sched_setscheduler(0, os.SCHED_FIFO | os.SCHED_RESET_ON_FORK, os.sched_param(priority))
    except OSError:
        return False
    return True


def prepare_hot_thread(core: int | None, priority: int | None) -> list[Finding]:
    """For the hot thread about itself: core, priority, all signals blocked. Returns what was not permitted."""
    signal.pthread_sigmask(signal.SIG_BLOCK, signal.valid_signals())
    findings = []
    if core is not None:
        try:
            os.sched_setaffinity(0, {core})
        except OSError as error:
            findings.append(Finding("core of the loop", f"core {core} for it alone", str(error.strerror), severity="warn"))
    if priority is not None:
        _set_fifo(priority)
    return findings


def priority_finding() -> Finding:
    """Said when SCHED_FIFO is not permitted."""
    return Finding(
        "real-time priority",
        "permitted",
        "not permitted",
        "Other programs can delay the loop.",
        f"An administrator can run: echo '{_user()} - rtprio 90' >> {LIMITS_FILE} (then log in again)",
        "warn",
    )


def _user() -> str:
    import getpass

    try:
        return getpass.getuser()
    except (KeyError, OSError):
        return str(os.getuid())


class Machine:
    """What holds for the whole computer or process while the loop runs: processor latency and locked memory. `close` undoes it."""

    def __init__(self) -> None:
        self.findings: list[Finding] = []
        self._latency: int | None = None
        self._locked = False

    def hold_latency(self) -> None:
        """Hold the latency file at 0: the processor does not fall into deep sleep between cycles."""
        try:
            self._latency = os.open(LATENCY_FILE, os.O_WRONLY | os.O_CLOEXEC)
            os.write(self._latency, struct.pack("i", 0))
        except OSError as error:
            absent = not LATENCY_FILE.exists()
            self.findings.append(
                Finding(
                    str(LATENCY_FILE),
                    "a file this user can write",
                    "no such file on this computer" if absent else str(error.strerror),
                    "The processor may sleep deeply between cycles and wake up late.",
                    "" if absent else f"An administrator can run: chmod o+rw {LATENCY_FILE}",
                    "warn",
                )
            )

    def lock_memory(self) -> None:
        """Lock all memory of the process, present and future, or neither: half of it makes later allocations fail."""
        reason, next_step = self._why_not_lock()
        if not reason:
            libc = ctypes.CDLL(None, use_errno=True)
            if libc.mlockall(MCL_CURRENT | MCL_FUTURE) == 0:
                self._locked = True
                return
            reason, next_step = os.strerror(ctypes.get_errno()), _memlock_command()
            libc.munlockall()
        self.findings.append(
            Finding(
                "memory of this process",
                "locked",
                reason,
                "A page that was put aside delays the cycle that needs it.",
                next_step,
                "warn",
            )
        )

    def _why_not_lock(self) -> tuple[str, str]:
        """("", "") when locking can be tried, else the reason and the next step."""
        import resource

        unlimited = resource.getrlimit(resource.RLIMIT_MEMLOCK)[0] == resource.RLIM_INFINITY
        if not unlimited and not _capability(CAP_IPC_LOCK):
            return "not permitted (limit on locked memory)", _memlock_command()
        size, free = _kilobytes("/proc/self/status", "VmSize"), _kilobytes("/proc/meminfo", "MemAvailable")
        if size > MEMORY_SHARE * free:
            return f"not tried ({size // 1024} MB wanted, {free // 1024} MB free)", "Free some memory."
        return "", ""

    def close(self) -> None:
        """Let the computer sleep again, unlock memory."""
        if self._latency is not None:
            os.close(self._latency)
            self._latency = None
        if self._locked:
            ctypes.CDLL(None).munlockall()
            self._locked = False


def _memlock_command() -> str:
    return f"An administrator can run: echo '{_user()} - memlock unlimited' >> {LIMITS_FILE} (then log in again)"


def _kilobytes(path: str, name: str) -> int:
    for line in Path(path).read_text(encoding="ascii", errors="replace").splitlines():
        if line.startswith(name + ":"):
            return int(line.split()[1])
    return 0


def _capability(bit: int) -> bool:
    for line in Path("/proc/self/status").read_text(encoding="ascii", errors="replace").splitlines():
        if line.startswith("CapEff:"):
            return bool(int(line.split()[1], 16) >> bit & 1)
    return False
