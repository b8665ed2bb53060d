"""`rtctl run`: the controller of a run file, in real time or in lock-step."""

from pathlib import Path

import click

from rtctl.cli.result import NEGATIVE, Result, json_option


@click.command()
@click.argument("run_file", metavar="RUN", type=click.Path(path_type=Path))
@click.option("--sim", is_flag=True, help="Start the simulated arm of the run file too.")
@click.option("--start", is_flag=True, help="Begin the motion; refused unless the driver says it is simulated.")
@click.option("--lockstep", is_flag=True, help="Simulated arm in this process, counted time, no real time.")
@click.option("--seconds", type=click.FloatRange(min=0.0, min_open=True), help="End after so many seconds.")
@click.option("--law", metavar="NAME", help="Control law instead of the run file's.")
@click.option("--records", type=click.Path(path_type=Path, file_okay=False), help="Folder for the record.")
@json_option
def run(
    run_file: Path, sim: bool, start: bool, lockstep: bool, seconds: float | None, law: str | None, records: Path | None
) -> Result:
    """Run the controller of a run file against its driver.

    Ends in ready: motion needs a start from another terminal. Ctrl-C stops
    and ends the run, a second Ctrl-C is an e-stop. It does not replace the
    hardware emergency stop.

    \b
    Examples:
      rtctl run configs/runs/one_joint.toml --sim --start
      rtctl run configs/runs/demo.toml --sim --start --law pid
      rtctl run configs/runs/demo.toml --lockstep --json
      rtctl run configs/runs/demo.toml --sim
    """
    from rtctl.config.run_file import load_run
    from rtctl.progress import Progress
    from rtctl.run import run_live, run_lockstep

    if lockstep and sim:
        raise click.UsageError("--lockstep has its own simulated arm: leave out --sim.")
    config = load_run(run_file)
    with Progress() as progress:
        if lockstep:
            outcome = run_lockstep(config, law=law, seconds=seconds, record_folder=records, progress=progress.say)
        else:
            outcome = run_live(
                config, law=law, sim=sim, start=start, seconds=seconds, record_folder=records, progress=progress.say
            )
    lines = [f"{outcome.law}: ended by {outcome.ended} in {outcome.mode}, verdict {outcome.verdict}"]
    if outcome.cause != "none":
        lines.append(_cause_text(outcome.cause))
    lines.append(f"record: {outcome.record_path}")
    return Result(outcome.as_json(), "\n".join(lines), NEGATIVE if outcome.verdict == "refuse" else 0)


def _cause_text(name: str) -> str:
    from rtctl.causes import cause_named

    entry = cause_named(name)
    return f"cause: {entry.sentence} {entry.next}"
