"""`rtctl vet`: is this arm description fit for torque control?"""

from pathlib import Path

import click

from rtctl.cli.result import NEGATIVE, Result, json_option


@click.command()
@click.argument("arm_file", metavar="ARM", type=click.Path(path_type=Path))
@click.option("--simulation-only", is_flag=True, help="Let published data pass that breaks the triangle inequality.")
@json_option
def vet(arm_file: Path, simulation_only: bool) -> Result:
    """Check an arm description before the first torque.

    Verdict pass, warn (look at it first) or refuse (exit code 1). Only
    measurements on the arm show that the numbers are right.

    \b
    Examples:
      rtctl vet configs/arms/six_joint.toml
      rtctl vet configs/arms/seven_joint.toml --json
    """
    from rich.table import Table

    from rtctl.cli.table import table_text
    from rtctl.vet import vet_arm

    result = vet_arm(arm_file, simulation_only)
    parts: list[object] = []
    for entry in result.tables:
        table = Table(title=entry.name, title_justify="left")
        for k, column in enumerate(entry.columns):
            table.add_column(column, justify="left" if k == 0 else "right")
        for row in entry.rows:
            table.add_row(*(f"{value:.4g}" if isinstance(value, float) else str(value) for value in row))
        parts.append(table)
    parts += [f"{finding.severity}: {finding}" for finding in result.findings]
    parts.append(f"verdict: {result.verdict} ({result.path})")
    return Result(result.to_json(), table_text(*parts), NEGATIVE if result.verdict == "refuse" else 0)
