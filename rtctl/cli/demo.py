"""`rtctl demo`: the whole job on the simulated arm in one command."""

from pathlib import Path

import click

from rtctl.cli.result import NEGATIVE, Result, json_option

CAUTION = (
    "Simulated arm, invented data. Not a safety-rated control: a real arm needs its risk assessment, a hardware emergency stop "
    "and the standards that apply."
)


@click.command()
@click.option("--output", type=click.Path(path_type=Path, file_okay=False), help="Folder for records and report.")
@json_option
def demo(output: Path | None) -> Result:
    """Run four control laws on a simulated six-joint arm and compare.

    Checks the arm description, runs the laws in real time against an arm
    that differs from the model, prints a table and writes a report.

    \b
    Examples:
      rtctl demo
      rtctl demo --output laws --json
    """
    from rtctl.cli.table import table_text
    from rtctl.demo import run_demo
    from rtctl.progress import Progress

    with Progress() as progress:
        outcome = run_demo(output, progress.say)
    lines = [*outcome.repeats, f"verdict: {outcome.verdict}", f"report:  {outcome.report_path}", CAUTION]
    text = table_text(outcome.comparison.table(), "\n".join(lines))
    return Result(outcome.as_json(), text, NEGATIVE if outcome.verdict == "refuse" else 0)
