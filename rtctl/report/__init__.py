"""Reports: one self-contained page for one record or several side by side, with the numbers behind it beside the page.

Nothing is fetched: script, style and data are in the file. Start reading at `page.py`; `figures.py` says what each figure shows,
`series.py` reduces rows to pixel columns. The script that draws is in `rtctl/report_assets/`.
"""

import json
from collections.abc import Sequence
from pathlib import Path

from rtctl.compare import Comparison, compare
from rtctl.errors import ConfigError, Finding
from rtctl.record.reader import Record
from rtctl.report.page import page


def write_report(records: Sequence[Record], path: Path | str, comparison: Comparison | None = None) -> list[Path]:
    """Write the page, and beside it the same numbers as JSON and CSV.

    records     at least one
    path        of the page, ending in .html
    comparison  of these records, when it was already made

    Returns the paths written, the page first. Raises ConfigError when the place cannot be written.
    """
    place = Path(path)
    found = comparison or compare(records)
    if place.suffix != ".html":
        raise _refusal(place, "a file name that ends in .html", f"{place.suffix or 'no ending'}", "")
    files = {
        place: page(records, found, place.stem),
        place.with_suffix(".json"): json.dumps(found.as_json(), indent=1, allow_nan=False) + "\n",
        place.with_suffix(".csv"): found.as_csv(),
    }
    for target, text in files.items():
        try:
            target.write_text(text, encoding="utf-8")
        except OSError as error:
            raise _refusal(target, "a file that can be written", str(error.strerror), "Name another folder.") from None
    return list(files)


def _refusal(path: Path, expected: str, got: str, next_step: str) -> ConfigError:
    return ConfigError.from_findings([Finding(str(path), expected, got, next=next_step)])
