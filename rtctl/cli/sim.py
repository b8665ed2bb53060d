"""`rtctl sim`: the simulated arm of a run file as a driver process."""

import json
import signal
import subprocess
import sys
from pathlib import Path
from types import FrameType
from typing import Any

import click

from rtctl.cli.result import Result, json_option


@click.command()
@click.argument("run_file", metavar="RUN", type=click.Path(path_type=Path))
@click.option("--seconds", type=click.FloatRange(min=0.0), default=0.0, help="End after so many seconds. [default: never]")
@json_option
def sim(run_file: Path, seconds: float) -> Result:
    """Start the simulated arm of a run file as a driver.

    It runs until Ctrl-C: then it brings the arm to rest and ends.

    \b
    Examples:
      rtctl sim configs/runs/demo.toml
      rtctl sim configs/runs/one_joint.toml --seconds 30
    """
    from rtctl.errors import ConfigError, SetupError
    from rtctl.places import driver_command

    command, environment = driver_command("sim_arm")
    # A session of its own: Ctrl-C reaches this process only, which asks the arm to end in order.
    child = subprocess.Popen(
        [*command, str(run_file), "--json", "--end-with-parent", "--seconds", str(seconds)],
        env=environment,
        stdin=subprocess.DEVNULL,
        stdout=subprocess.PIPE,
        stderr=subprocess.PIPE,
        start_new_session=True,
        text=True,
    )

    def end(number: int, frame: FrameType | None) -> None:
        child.send_signal(signal.SIGTERM)

    handlers = {number: signal.signal(number, end) for number in (signal.SIGINT, signal.SIGTERM, signal.SIGHUP)}
    assert child.stdout is not None and child.stderr is not None
    summary: dict[str, Any] = {}
    try:
        for line in child.stdout:
            summary = json.loads(line)
            if summary.get("ready"):
                print(_ready_text(summary), file=sys.stderr, flush=True)
        words = child.stderr.read().strip()
        code = child.wait()
    finally:
        for number, handler in handlers.items():
            signal.signal(number, handler)
        child.stdout.close()
        child.stderr.close()
    if code == ConfigError.exit_code:
        raise ConfigError(words)
    if code == SetupError.exit_code:
        raise SetupError(words)
    verdict = "pass" if code == 0 else "refuse"
    return Result(
        {"verdict": verdict, **summary}, f"simulated arm: {summary.get('ended', words)}", min(code, 1) if code >= 0 else 1
    )


def _ready_text(ready: dict[str, Any]) -> str:
    return (
        f"simulated arm: states on {ready['state_endpoint']}, torques on {ready['torque_endpoint']}. "
        "Ctrl-C ends it; from another terminal: rtctl run RUN"
    )
