"""`rtctl compare`: control laws side by side, from their records."""

from pathlib import Path

import click

from rtctl.cli.result import Result, json_option


@click.command()
@click.argument("records", metavar="RECORD...", nargs=-1, required=True, type=click.Path(path_type=Path))
@click.option("--csv", "csv_path", type=click.Path(path_type=Path), help="Also write the numbers as CSV.")
@json_option
def compare(records: tuple[Path, ...], csv_path: Path | None) -> Result:
    """Compare records: tracking error, effort, saturation, timing, stops.

    The verdict is "warn" when the records do not fit together, for instance
    when arm, limits or reference differ; the sentence says why.

    \b
    Examples:
      rtctl compare pid.rec computed_torque.rec
      rtctl compare *.rec --csv laws.csv
      rtctl compare pid.rec --json
    """
    from rtctl.cli.table import table_text
    from rtctl.compare import compare as compare_records
    from rtctl.record.reader import read_record

    comparison = compare_records([read_record(path) for path in records])
    if csv_path is not None:
        csv_path.write_text(comparison.as_csv())
    return Result(comparison.as_json(), table_text(comparison.table()))
