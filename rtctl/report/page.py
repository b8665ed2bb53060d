"""The page around the figures: identity, cautions, numbers, events. One file, nothing fetched from anywhere."""

import json
from collections.abc import Sequence
from datetime import UTC, datetime
from functools import cache
from html import escape
from importlib import resources
from typing import Any

from rtctl.compare import Comparison, Metrics, table_headings, table_line
from rtctl.record.reader import Record
from rtctl.report.figures import effort_against_error, figure_data, lateness_histogram, marker

CAUTIONS = (
    "rtctl is not a safety-rated control, and nothing on this page is evidence that an arm is safe. People are protected by the "
    "machine's own measures: the hardware emergency stop, the drives' safe torque off and safe stop functions, brakes, enabling "
    "device and guards.",
    "What an installation needs is decided by its risk assessment, the standards that apply to it, local codes, and people "
    "licensed or qualified to practise. This page reports what one controller computed and received during these runs, and claims "
    "no conformity with any standard. A result on a simulated arm says nothing certain about a real one.",
)


@cache
def asset(name: str) -> str:
    """Text of a file that travels with the package."""
    return resources.files("rtctl").joinpath("report_assets", name).read_text(encoding="utf-8")


def plotting_script() -> str:
    """uPlot with its licence in place of the comment that names its home page: the page mentions no host."""
    code = asset("uplot.iife.min.js")
    comment, _, rest = code.partition("*/")
    assert comment.startswith("/*!")
    return f"/* uPlot 1.6.32\n{asset('uplot_licence.txt')}*/{rest}"


def page(records: Sequence[Record], comparison: Comparison, stem: str) -> str:
    """The whole page.

    records     what is reported, in order
    comparison  of the same records
    stem        file name without ending, for numbers that are saved from the page
    """
    metrics = comparison.metrics
    labels = [found.label for found in metrics]
    title = f"{records[0].header['arm']['name']}: {', '.join(labels)}"
    parts = [
        f"<h1>{escape(title)}</h1>",
        f'<p class="lead">{escape(_lead(records, metrics))}</p>',
        _cautions(),
        _against(comparison),
        "<h2>Numbers</h2>",
        _numbers(metrics),
        _joint_numbers(metrics),
        _save(),
        "<h2>Error, effort and timing</h2>",
        _drawings(records, metrics),
        _figures(metrics),
        "<h2>Events</h2>",
        _event_table(metrics),
        "<h2>What ran</h2>",
        _identity(records, metrics),
        _versions(records[0]),
        f"<footer>Written {datetime.now(UTC):%Y-%m-%d %H:%M} UTC. Figures show the smallest and largest value of each column of "
        "time; the records hold every cycle. Not a safety-rated control.</footer>",
    ]
    scripts = [
        _data_script("figures", figure_data(records, metrics), f"{stem}.figures.json"),
        _data_script("numbers", comparison.as_json(), f"{stem}.json"),
        _data_script("table", comparison.as_csv(), f"{stem}.csv"),
        f"<script>{plotting_script()}</script>",
        f"<script>{asset('report.js')}</script>",
    ]
    return (
        '<!doctype html>\n<html lang="en"><head><meta charset="utf-8">'
        '<meta name="viewport" content="width=device-width, initial-scale=1">'
        f"<title>{escape(title)}</title><style>{asset('uplot.min.css')}\n{asset('report.css')}</style></head>\n"
        f"<body><main>{''.join(parts)}</main>\n{''.join(scripts)}</body></html>\n"
    )


def _data_script(name: str, values: Any, file_name: str) -> str:
    """Values for the script of the page. No "<" is left in them, so nothing in them can end or open an element."""
    text = json.dumps(values, allow_nan=False, separators=(",", ":")).replace("<", "\\u003c")
    return f'<script type="application/json" id="{name}" data-name="{escape(file_name)}">{text}</script>\n'


def _lead(records: Sequence[Record], metrics: Sequence[Metrics]) -> str:
    arm = "simulated arm" if all(found.simulated for found in metrics) else "real arm"
    if len({found.simulated for found in metrics}) > 1:
        arm = "simulated and real arm"
    runs = "one run" if len(records) == 1 else f"{len(records)} runs"
    rate_hz = 1e9 / records[0].header["period_ns"]
    longest = max(found.counted_s for found in metrics)
    joints = len(records[0].joint_names)
    return (
        f"{runs} on a {arm}, {joints} joint{'s' if joints > 1 else ''}, {rate_hz:g} Hz, up to {longest:.2f} s of counted motion."
    )


def _cautions() -> str:
    return f'<section class="cautions"><h2>Cautions</h2>{"".join(f"<p>{escape(text)}</p>" for text in CAUTIONS)}</section>'


def _against(comparison: Comparison) -> str:
    if comparison.comparable:
        return ""
    lines = "".join(f"<li>{escape(str(finding))}</li>" for finding in comparison.findings)
    return f'<section class="against"><b>Read the numbers with this in mind</b><ul>{lines}</ul></section>'


def _table(headings: Sequence[str], lines: Sequence[Sequence[str]], kind: str = "") -> str:
    """A table from finished cells (HTML)."""
    head = "".join(f"<th>{heading}</th>" for heading in headings)
    body = "".join("<tr>" + "".join(f"<td>{cell}</td>" for cell in line) + "</tr>" for line in lines)
    return f'<div class="wide"><table class="{kind}"><thead><tr>{head}</tr></thead><tbody>{body}</tbody></table></div>'


def _mark(number: int) -> str:
    return f'<svg viewBox="0 0 14 14" style="width:14px;vertical-align:-2px;margin-right:6px">{marker(number, 7, 7, 5)}</svg>'


def _numbers(metrics: Sequence[Metrics]) -> str:
    headings = [escape(_print_units(heading)) for heading in table_headings(metrics)]
    lines = []
    for number, found in enumerate(metrics):
        cells = [escape(cell) for cell in table_line(found, metrics)]
        lines.append([_mark(number) + cells[0], *cells[1:]])
    note = (
        '<p class="note">Error and effort cover the rows in which the law was in force and the reference was in motion. Effort is '
        "the time integral of the sum of squared torques sent. Saturated: share of those rows in which a torque limit acted. "
        "Late: wake-up after the deadline. Cost: from wake-up to the record. States missed: live cycles without a new state.</p>"
    )
    return _table(headings, lines, "numbers") + note


def _print_units(heading: str) -> str:
    return heading.replace("^2", "²").replace("[us]", "[µs]")


def _joint_numbers(metrics: Sequence[Metrics]) -> str:
    longest = max(metrics, key=lambda found: len(found.joints))
    headings = ["joint", "", *(escape(found.label) for found in metrics)]
    lines = []
    for j, joint in enumerate(longest.joints):
        small, unit = ("mm", "N") if joint.unit == "m" else ("mrad", "N m")
        here = [found.joints[j] if j < len(found.joints) else None for found in metrics]
        rows = (
            (f"RMS / peak error [{small}]", [f"{1e3 * x.rms_error:.3g} / {1e3 * x.peak_error:.3g}" if x else "" for x in here]),
            (
                f"peak torque [{unit}], limited [%]",
                [f"{x.peak_torque:.3g}, {100 * x.saturation_ratio:.2g}" if x else "" for x in here],
            ),
            (f"torque rate RMS [{unit}/s]", [f"{x.rms_torque_rate:.3g}" if x else "" for x in here]),
        )
        for k, (what, cells) in enumerate(rows):
            lines.append(
                [
                    escape(joint.name) if k == 0 else "",
                    f'<span class="note">{what}</span>',
                    *(c.replace("nan", "-") for c in cells),
                ]
            )
    return f"<details><summary>Per joint</summary>{_table(headings, lines)}</details>"


def _save() -> str:
    return (
        '<p class="save"><button type="button" data-save="numbers">save the numbers as JSON</button>'
        '<button type="button" data-save="table">save the numbers as CSV</button></p>'
    )


def _drawings(records: Sequence[Record], metrics: Sequence[Metrics]) -> str:
    drawn = (
        (
            effort_against_error(metrics) if len(metrics) > 1 else "",
            "Lower left is better: less error for less torque. Both numbers cover the same rows.",
        ),
        (
            lateness_histogram(records, metrics),
            "How late each cycle woke up. Both axes are logarithmic, so that single late cycles stay visible; the mark is the "
            "latest bin of each record. Cycles that were not late are in the first bin.",
        ),
    )
    figures = [f"<figure>{svg}<figcaption>{escape(text)}</figcaption></figure>" for svg, text in drawn if svg]
    return _key(metrics) + f'<div class="pair">{"".join(figures)}</div>'


def _key(metrics: Sequence[Metrics]) -> str:
    return (
        '<div class="key">'
        + "".join(f"<span>{_mark(k)}{escape(found.label)}</span>" for k, found in enumerate(metrics))
        + "</div>"
    )


def _figures(metrics: Sequence[Metrics]) -> str:
    key = _key(metrics)
    return (
        "<h2>Tracking</h2>"
        '<p class="screen">Drag across a figure to zoom all of them to that time; double-click for everything.</p>'
        f'<div class="joints" id="joints" role="group" aria-label="joint"></div>{key}'
        "<noscript><p>The figures below are drawn by a script in this page, which is switched off here.</p></noscript>"
        '<figure><div id="tracking"></div><figcaption>The error is shown where the law was in force and the reference in motion. '
        "Dashed vertical lines: stops.</figcaption></figure>"
        "<h2>Torque and what it was made of</h2>"
        '<figure><div id="torque"></div><figcaption>Sent: what left the controller. The terms add up to what the law asked for; '
        "the difference to what was sent is the work of start ramp and limits. One scale for all records of a joint."
        "</figcaption></figure>"
        "<h2>Accumulated effort</h2>"
        '<figure><div id="effort"></div><figcaption>Time integral of the sum of squared torques of all turning joints, from the '
        "beginning of the motion.</figcaption></figure>"
        "<h2>Margins</h2>"
        '<figure><div id="margins"></div><figcaption>The darker, the nearer a watch was to its limit: white is far from '
        "it, black is at or beyond it, grey is no row. Each column shows the smallest margin of its time.</figcaption></figure>"
    )


def _event_table(metrics: Sequence[Metrics]) -> str:
    lines = [
        [
            _mark(number) + escape(found.label),
            f"{event.t_s:.3f}",
            str(event.cycle),
            "stop" if event.what == "stop" else "mode",
            f"<b>{escape(event.text)}</b>" if event.what == "stop" else escape(event.text),
        ]
        for number, found in enumerate(metrics)
        for event in found.events
    ]
    return _table(["record", "time [s]", "cycle", "kind", "what happened"], lines, "words")


def _identity(records: Sequence[Record], metrics: Sequence[Metrics]) -> str:
    headings = ["record", "arm", "law and its terms", "hashes: arm, limits, reference", "started", "rows", "state of the record"]
    lines = []
    for number, (record, found) in enumerate(zip(records, metrics, strict=True)):
        header, hashes = record.header, record.header["hashes"]
        laws = "<br>".join(
            f"{escape(law)}: {escape(' + '.join(terms))}" for law, terms in header["laws"] if law in record.law_names
        )
        kind = "simulated arm" if found.simulated else "real arm"
        state = record.damage or (record.reason if record.complete else "cut off, no end")
        lines.append(
            [
                f'<span class="name">{_mark(number)}{escape(record.path.rsplit("/", 1)[-1])}</span><br>{kind}',
                escape(header["arm"]["name"]),
                laws,
                "<br>".join(
                    f"<code>{escape(str(hashes.get(name, 'none'))[:16])}</code>" for name in ("arm", "limits", "reference")
                ),
                escape(header["started_utc"][:19].replace("T", " ")) + " UTC",
                f"{found.row_count}<br>{found.lost_count}&nbsp;lost",
                f"{escape(str(state))}<br>last seal <code>{record.seal[:16]}</code>",
            ]
        )
    return _table(headings, lines, "words")


def _versions(record: Record) -> str:
    versions = ", ".join(f"{name} {version}" for name, version in record.header["versions"].items())
    facts = record.header["platform"]
    machine = ", ".join(str(facts[key]) for key in ("processor", "machine", "system", "kernel", "libc") if facts.get(key))
    cores = f", {facts['cores']} cores" if facts.get("cores") else ""
    return f'<p class="note">First record: {escape(versions)}. {escape(machine + cores)}.</p>'
