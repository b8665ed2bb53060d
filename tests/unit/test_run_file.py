"""Run files: the shipped demonstration, and each way to spoil it. All data is invented."""

import shutil
from collections.abc import Callable
from pathlib import Path

import pytest

from rtctl.config.run_file import RunConfig, load_run
from rtctl.errors import ConfigError
from tests.structure.sources_of import TOP

Spoil = Callable[..., str]


PAYLOAD = """[sim.payload]
frame = "tool"
mass_kg = 2.5
center_of_mass_m = [0.0, 0.0, 0.0]
inertia_kgm2 = [0.1, 0.1, 0.1, 0.0, 0.0, 0.0]
"""


@pytest.fixture
def folder(tmp_path: Path) -> Path:
    """A copy of the shipped files."""
    shutil.copytree(TOP / "configs", tmp_path / "configs")
    return tmp_path / "configs"


def change(file: Path, *edits: tuple[str, str]) -> None:
    """Exchange whole lines: the first that begins with a text becomes another text."""
    lines = file.read_text().split("\n")
    for start, new in edits:
        place = next(k for k, line in enumerate(lines) if line.startswith(start))
        lines[place] = new
    file.write_text("\n".join(lines))


def refusal(folder: Path, run: str = "demo") -> list[str]:
    """Messages, with the folder left out."""
    with pytest.raises(ConfigError) as caught:
        load_run(folder / f"runs/{run}.toml")
    return str(caught.value).replace(f"{folder}/", "").split("\n")


def spoiled(folder: Path, *edits: tuple[str, str], run: str = "demo") -> list[str]:
    change(folder / f"runs/{run}.toml", *edits)
    return refusal(folder, run)


def line(folder: Path, start: str, file: str = "runs/demo.toml") -> int:
    """Line number of the first line that begins so."""
    return next(k for k, text in enumerate((folder / file).read_text().split("\n"), 1) if text.startswith(start))


def at(folder: Path, start: str, file: str = "runs/demo.toml") -> str:
    """`file:line` of the first line that begins so."""
    return f"{file}:{line(folder, start, file)}"


# ---- what a run says -----------------------------------------------------------------------------------------------------------


def test_demo(folder: Path) -> None:
    """The demonstration's run is all there: arm, limits, timing, law, gains, reference, link, record, simulated arm."""
    run: RunConfig = load_run(folder / "runs/demo.toml")
    assert (run.name, run.law, run.pacing, run.rate_hz, run.period_ns, run.period_s) == (
        "demo",
        "computed_torque",
        "timer",
        1000,
        10**6,
        1e-3,
    )
    assert run.arm.n == 6 and run.arm.path == str(folder / "arms/six_joint.toml")
    assert run.limits["n"] == 6 and run.limits["arm_key"] == run.arm.key and run.limits_path == folder / "limits/six_joint.toml"
    assert run.gains["computed_torque"]["natural_frequency_rad_s"] == 15.0 and run.gains["feedforward"] == {}
    assert run.reference.kind == "multi_sine"
    assert run.folder == folder / "runs" and run.record_folder == Path("records")
    assert (run.link.state, run.link.torque) == ("ipc://demo-state", "ipc://demo-torque")
    assert run.text == (folder / "runs/demo.toml").read_text()
    sim = run.sim
    assert sim is not None and sim.arm.key == run.arm.key and sim.arm.hash != run.arm.hash
    assert sim.q_start == (-0.2, 1.7, 0.6, 0.2, 0.1, 0.0) and sim.lag_s == (0.002,) * 6
    assert sim.encoder_quantum == (2.0 * 3.141592653589793 / 2**20,) * 6
    assert (sim.substep_count, sim.stiction_ratio, sim.seed, sim.tau_measured, sim.gravity_added) == (4, 1.15, 1, True, False)


def test_law_is_one_line(folder: Path) -> None:
    """Another law is one other line."""
    change(folder / "runs/demo.toml", ('law = "', 'law = "pid"'))
    assert load_run(folder / "runs/demo.toml").law == "pid"


def test_endpoints_in_the_runtime_folder(folder: Path, tmp_path: Path, monkeypatch: pytest.MonkeyPatch) -> None:
    """Loading touches no folder; the full endpoints lie in the runtime folder."""
    monkeypatch.setenv("XDG_RUNTIME_DIR", str(tmp_path))
    run = load_run(folder / "runs/demo.toml")
    assert not (tmp_path / "rtctl").exists()
    assert run.link.state_endpoint == f"ipc://{tmp_path}/rtctl/demo-state"
    assert run.link.torque_endpoint == f"ipc://{tmp_path}/rtctl/demo-torque"


def test_hash_covers_every_file(folder: Path) -> None:
    """A change of any file of the run is another hash; the files are listed with theirs."""
    path = folder / "runs/seven_joint.toml"
    files = ["runs/seven_joint.toml", "arms/seven_joint.toml", "limits/seven_joint.toml", "runs/seven_joint_waypoints.csv"]
    run = load_run(path)
    assert sorted(run.hashes) == sorted(str(folder / file) for file in files)
    hashes = {run.hash}
    for file in files:
        (folder / file).write_text((folder / file).read_text() + "\n")
        hashes.add(load_run(path).hash)
    assert len(hashes) == 5


def test_nothing_can_be_changed(folder: Path) -> None:
    """Limits, gains and files are read-only."""
    run = load_run(folder / "runs/demo.toml")
    with pytest.raises(ValueError, match="read-only"):
        run.limits["tau_max"][0] = 1e6
    with pytest.raises(TypeError):
        run.gains["pid"]["kp_nm_rad"] = 1e6  # type: ignore[index]  # the mistake


def test_without_simulated_arm(folder: Path) -> None:
    """A run on hardware has no table [sim]."""
    file = folder / "runs/demo.toml"
    text = file.read_text()
    file.write_text(text[: text.index("[sim]")])
    assert load_run(file).sim is None


def test_payload_of_the_true_arm(folder: Path) -> None:
    """The simulated arm may carry another payload than its arm file says, or none."""
    file = folder / "runs/demo.toml"
    text = file.read_text()
    masses = {}
    for name, extra in (
        ("file", ""),
        ("none", "payload_dropped = true\n"),
        ("other", PAYLOAD),
    ):
        file.write_text(text + extra)
        sim = load_run(file).sim
        assert sim is not None
        masses[name] = float(sim.arm.model["mass"][5])
    assert masses["file"] - masses["none"] == pytest.approx(1.0)
    assert masses["other"] - masses["none"] == pytest.approx(2.5)


def test_run_may_tighten_the_limits(folder: Path) -> None:
    """A table [limits] tightens for this run alone."""
    file = folder / "runs/demo.toml"
    file.write_text(file.read_text() + "[limits]\ntorque_max_nm = 14.0\n")
    assert list(load_run(file).limits["tau_max"][:6]) == [14.0] * 6
    file.write_text(file.read_text().replace("torque_max_nm = 14.0", "torque_max_nm = 15.0"))
    assert refusal(folder) == [
        f"runs/demo.toml:{line(folder, 'torque_max_nm')}: limits.torque_max_nm[5] (wrist_roll): "
        "must be at most 14 N m as in limits/six_joint.toml, got 15."
    ]


# ---- what is refused -----------------------------------------------------------------------------------------------------------

SINGLE = {
    "rate": (("rate_hz", "rate_hz = 0.001"),
        "rate_hz: must be a finite number >= 10 and <= 10000 Hz, got 0.001. "
        "It looks like a period; one of 0.001 s is a rate of 1000 Hz."),
    "rate too high": (("rate_hz", "rate_hz = 50000"), "rate_hz: must be a finite number >= 10 and <= 10000 Hz, got 50000."),
    "pacing": (("pacing", 'pacing = "clock"'), 'pacing: must be one of timer, state, got "clock".'),
    "law": (("law", "law = 3"), "law: must be text, got 3."),
    "name": (("name", 'name = "../demo"'),
        'name: must be a name of letters, digits, _ and -, a letter first, at most 48 characters, got "../demo".'),
    "kind": (("kind", 'kind = "multisine"'),
        'reference.kind: must be one of hold, point_to_point, waypoints, multi_sine, got "multisine".'),
    "degrees": (("center_rad", "center_rad = [0.0, 109.0, 0.8, 0.0, 0.3, 0.0]"),
        "reference.center_rad[1] (shoulder): must be within -2.5 to 2.5 rad, got 109. "
        "It looks like degrees; 109 degrees are 1.902 rad."),
    "beyond the limits": (("center_rad", "center_rad = [0.0, 1.9, 0.8, 0.0, 2.05, 0.0]"),
        "reference.center_rad[4] (wrist_pitch): must be within -2 to 2 rad, got 2.05."),
    "too few joints": (("center_rad", "center_rad = [0.0, 1.9]"),
        "reference.center_rad: must be one number or a list of 6 numbers, one per joint, got a list of 2."),
    "duration": (("duration_s", "duration_s = -2.8"), "reference.duration_s: must be a finite number > 0 s, got -2.8."),
    "network": (("state = ", 'state = "tcp://127.0.0.1:5555"'),
        'link.state: must be a local socket, ipc://NAME, got "tcp://127.0.0.1:5555". This version speaks over local sockets only. '
        "Run driver and controller on one computer."),
    "no socket": (("state = ", 'state = "demo"'), 'link.state: must be a local socket, ipc://NAME, got "demo".'),
    "socket elsewhere": (("state = ", 'state = "ipc:///tmp/x"'),
        'link.state: must be a name of letters, digits, _ and -, a letter first, at most 48 characters, got "/tmp/x".'),
    "same socket": (("torque = ", 'torque = "ipc://demo-state"'),
        'link.torque: must be another socket than state, got "ipc://demo-state".'),
    "gain as text": (("kp_nm_rad", 'kp_nm_rad = [600.0, "2 kN m", 560.0, 60.0, 60.0, 30.0]'),
        'gains.pid.kp_nm_rad[1]: must be a finite number in N m/rad, got "2 kN m". '
        "A unit is written beside the number; write the number in N m/rad alone."),
    "gain not a number": (("kp_nm_rad", "kp_nm_rad = nan"),
        "gains.pid.kp_nm_rad: must be a finite number in N m/rad, or a list, got nan."),
    "gain without unit": (("kp_nm_rad", "kp = 600.0"),
        "gains.pid.kp: must be a key that ends in its unit, e.g. kp_nm_rad, got a key without unit."),
    "start outside": (("start_rad", "start_rad = [-0.2, 2.9, 0.6, 0.2, 0.1, 0.0]"),
        "sim.start_rad[1] (shoulder): must be within -2.6 to 2.6 rad, got 2.9."),
    "half a period": (("torque_delay_s", "torque_delay_s = 0.0015"),
        "sim.torque_delay_s: must be a whole number of periods of 0.001 s, at most 63, got 0.0015."),
    "delay in ms": (("torque_delay_s", "torque_delay_s = 2"),
        "sim.torque_delay_s: must be a finite number >= 0 and <= 1 s, got 2. It looks like milliseconds; 2 ms are 0.002 s."),
    "long delay": (("torque_delay_s", "torque_delay_s = 0.064"),
        "sim.torque_delay_s: must be a whole number of periods of 0.001 s, at most 63, got 0.064."),
    "stiction": (("stiction_ratio", "stiction_ratio = 0.9"), "sim.stiction_ratio: must be a finite number >= 1, got 0.9."),
    "seed": (("seed", "seed = 1.5"), "sim.seed: must be a whole number >= 0, got 1.5."),
}  # fmt: skip


@pytest.mark.parametrize(("edit", "text"), SINGLE.values(), ids=SINGLE)
def test_single_mistakes(folder: Path, edit: tuple[str, str], text: str) -> None:
    """Each mistake has one sentence with its line, what was expected with the unit, what came, and the likely cause."""
    number = line(folder, edit[0])
    assert spoiled(folder, edit) == [f"runs/demo.toml:{number}: {text}"]


def test_unknown_key(folder: Path) -> None:
    """A misspelt key is an unknown one, and the one that is missing is named."""
    number = line(folder, "pacing")
    assert spoiled(folder, ("pacing", 'pace = "timer"')) == [
        "runs/demo.toml: pacing: must be given, one of timer, state, got nothing.",
        f"runs/demo.toml:{number}: pace: must be a known key, got an unknown one. The nearest is pacing.",
    ]


def test_missing_files(folder: Path) -> None:
    """Missing run, arm, limits and waypoint files are each named as the path that was looked for."""
    with pytest.raises(ConfigError) as caught:
        load_run(folder / "runs/demos.toml")
    place = f"{folder}/runs/demos.toml"
    assert str(caught.value) == f"{place}: must be an existing file, got none. The nearest in that folder is demo.toml."
    edits = ("arm_file", 'arm_file = "../arms/six_joints.toml"'), ("limits_file", 'limits_file = "../limit/six_joint.toml"')
    assert spoiled(folder, *edits) == [
        "arms/six_joints.toml: must be an existing file, got none. The nearest in that folder is six_joint.toml.",
        "limit/six_joint.toml: must be an existing file, got none. There is no folder limit either.",
    ]
    place = at(folder, "file", "runs/seven_joint.toml")
    assert spoiled(folder, ("file", 'file = "none.csv"'), run="seven_joint") == [
        f"{place}: reference.file: must be a readable file, got runs/none.csv: no such file or directory."
    ]


def test_coarse_encoder(folder: Path) -> None:
    """An encoder whose single count looks like motion at this rate is refused: the arm would never be still."""
    number = line(folder, "encoder_bits")
    got = "0.0479 rad/s (waist, shoulder, elbow). One count would already look like motion."
    assert spoiled(folder, ("encoder_bits", "encoder_bits = 17")) == [
        f"runs/demo.toml:{number}: sim.encoder_bits: must be enough that one count per period stays below "
        f"still_speed_rad_s (0.03 rad/s), got {got}",
        f"runs/demo.toml:{number}: sim.encoder_bits: must be enough that one count per period stays below "
        f"the still_speed_rad_s of the limits (0.03 rad/s), got {got}",
    ]
    change(folder / "runs/demo.toml", ("encoder_bits", "encoder_bits = 0"))
    run = load_run(folder / "runs/demo.toml")
    assert run.sim is not None and run.sim.encoder_quantum == (0.0,) * 6


def test_true_arm_of_another_kind(folder: Path) -> None:
    """The simulated arm has the same name, joints and units as the controller's."""
    file = folder / "runs/demo.toml"
    file.write_text(file.read_text().replace("/six_joint_true.toml", "/one_joint.toml"))
    place = at(folder, 'arm_file = "../arms/one_joint.toml"')
    assert refusal(folder) == [
        f"{place}: sim.arm_file: must be an arm of the same name, joints and units (six_joint: waist, shoulder, elbow, "
        "forearm_roll, wrist_pitch, wrist_roll), got one_joint: axle."
    ]


def test_payload_mistakes(folder: Path) -> None:
    """A payload on no frame, and one that is dropped and given at once."""
    file = folder / "runs/demo.toml"
    file.write_text(file.read_text() + "payload_dropped = true\n" + PAYLOAD.replace("tool", "tol"))
    assert refusal(folder) == [
        f"{at(folder, 'payload_dropped')}: sim.payload_dropped: must be false beside [sim.payload], got true.",
        f"{at(folder, 'frame = ')}: sim.payload.frame: must be a frame of ../arms/six_joint_true.toml "
        '(tool, elbow_point), got "tol".',
    ]


def test_move_that_is_timed_twice(folder: Path) -> None:
    """A point-to-point move is timed or driven by both limits, never half of it."""
    place = at(folder, "[reference]", "runs/planar_two.toml")
    where = f"{place}: reference: must be given either duration_s or both speed_max_rad_s and acceleration_max_rad_s2, got "
    assert spoiled(folder, ("speed_max_rad_s", "duration_s = 2.0"), run="planar_two") == [
        f"{where}duration_s and acceleration_max_rad_s2."
    ]
    assert spoiled(folder, ("duration_s", "# none"), ("acceleration_max_rad_s2", "# none"), run="planar_two") == [
        f"{where}none of them."
    ]


def test_times_shorter_than_the_period(folder: Path) -> None:
    """At a slow rate a state is always older, and a torque always longer in use, than limits made for a fast one allow."""
    where = {key: line(folder, key, "limits/six_joint.toml") for key in ("state_age_max_s", "valid_for_s")}
    change(folder / "runs/demo.toml", ("torque_delay_s", "torque_delay_s = 0.0"))
    assert spoiled(folder, ("rate_hz", "rate_hz = 50")) == [
        f"limits/six_joint.toml:{where['state_age_max_s']}: state_age_max_s: must be more than 1 period of 0.02 s, got 0.02.",
        f"limits/six_joint.toml:{where['valid_for_s']}: valid_for_s: must be more than 2 periods of 0.02 s, got 0.03.",
    ]


def test_all_files_at_once(folder: Path) -> None:
    """Mistakes in the run, its arm, its limits and the true arm come together, each with its file and line."""
    arm, true, limits = "arms/six_joint.toml", "arms/six_joint_true.toml", "limits/six_joint.toml"
    change(folder / arm, ("mass_kg", "mass_kg = -4.2"))
    change(folder / true, ("gear_ratio", "gear_ratio = -100.0"))
    change(folder / limits, ("late_s", "late_s = 0"))
    edits = ("rate_hz", "rate_hz = true"), ("torque = ", 'tork = "ipc://demo-torque"'), ("folder", "# none")
    assert spoiled(folder, *edits) == [
        f"{at(folder, 'rate_hz')}: rate_hz: must be a finite number >= 10 and <= 10000 Hz, got true.",
        f"{at(folder, 'mass_kg', arm)}: joint[0].body.mass_kg: must be a finite number > 0 kg, got -4.2.",
        f"{at(folder, 'late_s', limits)}: late_s: must be a finite number > 0 and <= 1 s, got 0.",
        f"{at(folder, '[link]')}: link.torque: must be given, text, got nothing.",
        f"{at(folder, 'tork')}: link.tork: must be a known key, got an unknown one. The nearest is torque.",
        f"{at(folder, '[record]')}: record.folder: must be given, text, got nothing.",
        f"{at(folder, 'gear_ratio', true)}: joint[1].drive.gear_ratio: must be a finite number > 0, got -100.0.",
    ]


def test_wrong_kinds_of_tables(folder: Path) -> None:
    """Text where a table belongs is told which keys belong there."""
    file = folder / "runs/demo.toml"
    text = file.read_text()
    head = text[: text.index("# ---- motion")]
    file.write_text(head + 'reference = "hold"\nlink = 1\nrecord = "records"\ngains = 2\nsim = "six"\n')
    messages = refusal(folder)
    assert messages[:4] == [
        f"{at(folder, 'gains')}: gains: must be tables [gains.<law>], got 2.",
        f'{at(folder, "reference")}: reference: must be a table [reference] with kind, got "hold".',
        f"{at(folder, 'link')}: link: must be a table (keys: state, torque), got 1.",
        f'{at(folder, "record")}: record: must be a table (keys: folder), got "records".',
    ]
    assert len(messages) == 5 and messages[4].startswith(
        f"{at(folder, 'sim')}: sim: must be a table (keys: arm_file, start_rad, "
    )
