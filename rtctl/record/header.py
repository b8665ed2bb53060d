"""The header of a record: everything that is needed to read its rows a year later, without this program.

Keys of the map:

    run_key          number shared with the ring the rows came from
    started_utc      ISO 8601; started_ns is the controller's monotonic clock at that moment
    period_ns        of the loop
    joint_names, joint_units ("rad" or "m")
    arm              name, key, hash, path, limits (q_min, q_max, qd_max, tau_max, tau_rate_max; one value per joint)
    laws             [[law name, [term names in the order of their sum]], ...]; `law_index` counts in this list
    watches, causes, modes, stops       names by index; cause code of watch w is w + 1
    columns          [{name, type, per, shape, units, frame, meaning}, ...] in the order of a row's bytes;
                     type is "i8" or "f8" (8-byte little-endian); shape is [] or [n] or [terms, n] or [watches];
                     units is one unit, or one per joint
    config           the run as it was configured
    hashes           SHA-256 of what two runs must share to be comparable: arm, limits, reference, ...
    simulated        True when the driver was started as a simulated arm
    versions, platform
"""

import os
import platform
import sys
import time
from collections.abc import Mapping, Sequence
from datetime import UTC, datetime
from importlib import metadata
from typing import TYPE_CHECKING, Any

from rtctl.blocks import COLUMNS, MODE_NAMES, STOP_NAMES, WATCH_NAMES, Column
from rtctl.causes import CAUSES
from rtctl.record.rows import compact_shape

if TYPE_CHECKING:
    from rtctl.arm import Arm

_FRAMES = {"cycle": "none", "joint": "joint axes, positive along the joint axis of the arm file", "watch": "none"}
_FRAMES["term"] = _FRAMES["joint"]


def column_units(unit: str, joint_units: Sequence[str]) -> list[str]:
    """Unit per joint: "rad/s|m/s" is rad/s for a revolute joint and m/s for a prismatic one."""
    revolute, _, prismatic = unit.partition("|")
    return [prismatic if prismatic and joint_unit == "m" else revolute for joint_unit in joint_units]


def _column(column: Column, joint_units: Sequence[str], term_count: int) -> dict[str, Any]:
    per_joint = column.per in ("joint", "term")
    return {
        "name": column.name,
        "type": column.kind,
        "per": column.per,
        "shape": list(compact_shape(column, len(joint_units), term_count)),
        "units": column_units(column.unit, joint_units) if per_joint else column.unit,
        "frame": _FRAMES[column.per],
        "meaning": column.meaning,
    }


def versions() -> dict[str, str]:
    """Versions of what computes: the interpreter, this package and what it stands on."""
    found = {"python": sys.version.split()[0]}
    for package in ("rtctl", "numpy", "numba", "llvmlite", "pyzmq", "msgpack"):
        try:
            found[package] = metadata.version(package)
        except metadata.PackageNotFoundError:
            found[package] = "not installed"
    return found


def platform_facts() -> dict[str, str]:
    """What else decides whether a replay is bit-identical: processor, its features, C library, kernel."""
    facts = {"system": platform.system(), "kernel": platform.release(), "machine": platform.machine()}
    facts["libc"] = " ".join(platform.libc_ver())
    facts["cores"] = str(os.cpu_count())
    wanted = {"model name": "processor", "flags": "features", "Features": "features"}
    try:
        with open("/proc/cpuinfo", encoding="utf-8") as file:
            for line in file:
                key, _, value = line.partition(":")
                if key.strip() in wanted:
                    facts.setdefault(wanted[key.strip()], value.strip())
    except OSError:
        facts["processor"] = platform.processor()
    return facts


def make_header(
    arm: "Arm",
    term_names: Mapping[str, Sequence[str]],
    *,
    run_key: int,
    period_ns: int,
    config: Mapping[str, Any],
    hashes: Mapping[str, str],
    simulated: bool,
) -> dict[str, Any]:
    """The header of a run's record.

    arm         Arm         joints, limits and hash
    term_names              law name to its ordered term names, in the order of `law_index`
    run_key                 `Ring.run_key` of the ring that the rows will come from
    period_ns               of the loop
    config                  plain values only: what msgpack can carry
    hashes                  at least "limits" and "reference"; "arm" is added
    simulated               the driver was started as a simulated arm

    Returns a dict of plain values.
    """
    term_count = max((len(names) for names in term_names.values()), default=0)
    limits = {
        name: [float(value) for value in getattr(arm, name)] for name in ("q_min", "q_max", "qd_max", "tau_max", "tau_rate_max")
    }
    return {
        "run_key": run_key,
        "started_utc": datetime.now(UTC).isoformat(timespec="milliseconds"),
        "started_ns": time.monotonic_ns(),
        "period_ns": period_ns,
        "joint_names": list(arm.joint_names),
        "joint_units": list(arm.units),
        "arm": {"name": arm.name, "key": int(arm.key), "hash": arm.hash, "path": str(arm.path), "limits": limits},
        "laws": [[law, list(names)] for law, names in term_names.items()],
        "watches": list(WATCH_NAMES),
        "causes": [cause.name for cause in CAUSES],
        "modes": list(MODE_NAMES),
        "stops": list(STOP_NAMES),
        "columns": [_column(column, arm.units, term_count) for column in COLUMNS],
        "config": dict(config),
        "hashes": {"arm": arm.hash, **hashes},
        "simulated": simulated,
        "versions": versions(),
        "platform": platform_facts(),
    }
