"""`rtctl report`: one page with figures from one record or several side by side."""

from pathlib import Path

import click

from rtctl.cli.result import Result, json_option


@click.command()
@click.argument("records", metavar="RECORD...", nargs=-1, required=True, type=click.Path(path_type=Path))
@click.option("--output", type=click.Path(path_type=Path), help="The page. [default: first record, .html]")
@json_option
def report(records: tuple[Path, ...], output: Path | None) -> Result:
    """Write a self-contained HTML page with figures from records.

    The numbers behind it are written beside the page as JSON and CSV.

    \b
    Examples:
      rtctl report run.rec
      rtctl report pid.rec computed_torque.rec --output laws.html
    """
    from rtctl.compare import compare
    from rtctl.record.reader import read_record
    from rtctl.report import write_report

    found = [read_record(path) for path in records]
    comparison = compare(found)
    paths = write_report(found, output or records[0].with_suffix(".html"), comparison)
    data = {**comparison.as_json(), "report_path": str(paths[0]), "files": [str(path) for path in paths]}
    return Result(data, "\n".join(["report and numbers:", *(f"  {path}" for path in paths)]))
