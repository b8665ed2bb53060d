"""Names of arms, joints, frames and runs: they become parts of file names, socket names and column headers."""

import re

from rtctl.errors import Finding

NAME_MAX = 48
_NAME = re.compile(r"[A-Za-z][A-Za-z0-9_-]*")


def name_findings(where: str, name: str) -> list[Finding]:
    """What is wrong with a name: at most one finding."""
    if _NAME.fullmatch(name) and len(name) <= NAME_MAX:
        return []
    got = f'"{name}"' if len(name) <= NAME_MAX else f"{len(name)} characters"
    return [Finding(where, f"a name of letters, digits, _ and -, a letter first, at most {NAME_MAX} characters", got)]
