"""The whole job on the simulated arm: vet the description, run four laws on the same motion, compare them from their records.

Each law gets a simulated arm of its own in another process, so that all of them start from the same pose. The simulated arm has
other masses, another payload and other friction than the model that the laws use. All data is invented.
"""

import datetime
from collections.abc import Callable
from dataclasses import dataclass
from pathlib import Path
from typing import Any

from rtctl.compare import Comparison, compare
from rtctl.config.run_file import RunConfig, load_run
from rtctl.errors import ModelError
from rtctl.places import DEMO_RUN, shipped_file
from rtctl.record.reader import read_record
from rtctl.report import write_report
from rtctl.run import RunOutcome, run_live
from rtctl.vet import VetResult, vet_arm

LAWS = ("feedforward", "pid", "pd_gravity", "computed_torque")
# Stops that a busy computer causes, not a law: such a run is repeated, and said to be.
COMPUTER_CAUSES = ("state_age", "clock_jump", "late_cycles", "grant", "side_thread", "loop_delay")
REPEATS_MAX = 2


@dataclass(frozen=True)
class DemoOutcome:
    """What the demonstration came to."""

    vet: VetResult
    runs: tuple[RunOutcome, ...]
    comparison: Comparison
    report_path: Path
    repeats: tuple[str, ...]  # sentences about runs that the computer spoiled

    @property
    def verdict(self) -> str:
        """refuse: a fault stopped a law, or the description is unfit; warn: something stands against comparing; else pass."""
        if self.vet.verdict == "refuse" or any(run.verdict == "refuse" for run in self.runs):
            return "refuse"
        return "pass" if self.comparison.comparable else "warn"

    def as_json(self) -> dict[str, Any]:
        """Metrics by law, and where everything lies."""
        return {
            "verdict": self.verdict,
            "laws": {
                run.law: {**metrics.as_json(), "record_path": str(run.record_path)}
                for run, metrics in zip(self.runs, self.comparison.metrics, strict=True)
            },
            "report_path": str(self.report_path),
            "repeats": list(self.repeats),
            "vet": self.vet.to_json(),
            "findings": [vars(finding) for finding in self.comparison.findings],
            "permissions": [vars(finding) for finding in self.runs[0].permissions] if self.runs else [],
        }


def run_demo(folder: Path | None = None, progress: Callable[[str], None] = lambda text: None) -> DemoOutcome:
    """Vet, run, compare, report.

    folder   for records and report; None = a new folder below the record folder of the demo's run file

    Raises ModelError when the arm description is refused, KeyboardInterrupt after Ctrl-C, and what a run raises.
    """
    progress("checking the arm description")
    run = load_run(shipped_file(DEMO_RUN))
    vet = vet_arm(run.arm.path)
    if vet.verdict == "refuse":
        raise ModelError.from_findings(list(vet.findings))
    stamp = datetime.datetime.now(datetime.UTC).strftime("%Y%m%d-%H%M%S")
    place = folder if folder is not None else run.record_folder / f"demo-{stamp}"
    runs: list[RunOutcome] = []
    repeats: list[str] = []
    for number, law in enumerate(LAWS, start=1):
        say = _counted(progress, f"{number}/{len(LAWS)} ", first=number == 1)
        outcome = _run_law(run, law, place, say)
        for _ in range(REPEATS_MAX):
            if outcome.cause not in COMPUTER_CAUSES:
                break
            repeats.append(f"{law}: repeated, the computer was too busy ({outcome.cause}); first record {outcome.record_path}")
            say(repeats[-1])
            outcome = _run_law(run, law, place, say)
        runs.append(outcome)
    progress("comparing and writing the report")
    records = [read_record(outcome.record_path) for outcome in runs]
    comparison = compare(records)
    report_path = write_report(records, place / "report.html", comparison)[0]
    return DemoOutcome(vet, tuple(runs), comparison, report_path, tuple(repeats))


def _run_law(run: RunConfig, law: str, folder: Path, progress: Callable[[str], None]) -> RunOutcome:
    outcome = run_live(run, law=law, sim=True, start=True, record_folder=folder, progress=progress)
    if outcome.ended in ("interrupted", "terminated"):
        raise KeyboardInterrupt
    return outcome


def _counted(progress: Callable[[str], None], prefix: str, first: bool) -> Callable[[str], None]:
    """Progress with the law's number in front; what the computer does not permit is said once, not for every law."""

    def say(text: str) -> None:
        if first or not text.startswith("not permitted"):
            progress(text if text.startswith("not permitted") else prefix + text)

    return say
