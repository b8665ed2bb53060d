"""Unit suffixes of keys: every number in a file has its unit in its name, and messages take the unit from there."""

UNITS = {  # suffix of a key -> unit as messages say it; _ns is always nanoseconds, _nm always newton metres
    "_s": "s",
    "_ns": "ns",
    "_hz": "Hz",
    "_rad": "rad",
    "_rad_s": "rad/s",
    "_rad_s2": "rad/s^2",
    "_rad_m": "rad/m",
    "_m": "m",
    "_m_s": "m/s",
    "_m_s2": "m/s^2",
    "_kg": "kg",
    "_kgm2": "kg m^2",
    "_n": "N",
    "_n_s": "N/s",
    "_n_m": "N/m",
    "_n_s_m": "N s/m",
    "_nm": "N m",
    "_nm_s": "N m/s",
    "_nm_rad": "N m/rad",
    "_nm_s_rad": "N m s/rad",
    "_nm_rad_s": "N m/(rad s)",
    "_nm2_s": "N^2 m^2 s",
    "_j": "J",
    "_1_s": "1/s",
    "_1_s2": "1/s^2",
    "_1_s3": "1/s^3",
    "_bits": "bits",
    "_count": "(count)",
    "_ratio": "(ratio)",
    "_factor": "(factor)",
}


def suffix_of(key: str) -> str | None:
    """The longest unit suffix a key ends in; None when it has none."""
    parts = key.split("_")
    for first in range(1, len(parts)):
        suffix = "_" + "_".join(parts[first:])
        if suffix in UNITS:
            return suffix
    return None


def unit_of(key: str) -> str:
    """The unit of a key as messages say it, empty when its name has none."""
    suffix = suffix_of(key)
    return UNITS[suffix] if suffix else ""


def stem_of(key: str) -> str:
    """A key without its unit."""
    return key.removesuffix(suffix_of(key) or "")
