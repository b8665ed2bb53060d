"""TOML files: what is read, which line a key is on, and the one sentence for a file that cannot be read."""

from pathlib import Path

import pytest

from rtctl.config.toml_file import BYTES_MAX, key_lines, key_text, read_toml
from rtctl.errors import ConfigError

TEXT = '''# a comment with [brackets] and = signs
name = "x"  # [not.a.table]
list = [  # opens
  1,
  "]",  # a closing bracket in text does not close
  [2, 3],
]
note = """
key = 1
[table]
"""

[first]
a.b = 1
"quoted key" = 2
inline = { c = 1 }

[[row]]
name = "one"
[row.body]
mass = 1

[[row]]
name = "two"

  [ row . body ]
  mass = 2
'''


def test_lines_of_keys() -> None:
    """Every key has its line: through lists and text over several lines, dotted and quoted keys, and elements of table arrays."""
    assert key_lines(TEXT) == {
        ("name",): 2,
        ("list",): 3,
        ("note",): 8,
        ("first",): 13,
        ("first", "a"): 14,
        ("first", "a", "b"): 14,
        ("first", "quoted key"): 15,
        ("first", "inline"): 16,
        ("row",): 18,
        ("row", 0): 18,
        ("row", 0, "name"): 19,
        ("row", 0, "body"): 20,
        ("row", 0, "body", "mass"): 21,
        ("row", 1): 23,
        ("row", 1, "name"): 24,
        ("row", 1, "body"): 26,
        ("row", 1, "body", "mass"): 27,
    }


def test_places_in_messages(tmp_path: Path) -> None:
    """A place is file, line and key path; a key without a line of its own has that of what holds it, a missing one none."""
    file = tmp_path / "a.toml"
    file.write_text(TEXT)
    document = read_toml(file)
    assert document.where("row", 1, "body", "mass") == f"{file}:27: row[1].body.mass"
    assert document.where("list", 2, 0) == f"{file}:3: list[2][0]"
    assert document.where("row", 1, "body", "absent") == f"{file}:26: row[1].body.absent"
    assert document.where("absent") == f"{file}: absent"
    assert document.where() == str(file)
    assert document.data["row"][1]["body"]["mass"] == 2
    assert key_text(()) == ""


def message(path: Path) -> str:
    with pytest.raises(ConfigError) as caught:
        read_toml(path)
    assert len(caught.value.findings) == 1
    return str(caught.value)


def test_missing_file(tmp_path: Path) -> None:
    """A missing file names the nearest one in its folder, or says that there is no such folder."""
    (tmp_path / "elbow_arm.toml").write_text("")
    assert message(tmp_path / "elbow-arm.toml") == (
        f"{tmp_path}/elbow-arm.toml: must be an existing file, got none. The nearest in that folder is elbow_arm.toml."
    )
    assert message(tmp_path / "xyz.toml") == f"{tmp_path}/xyz.toml: must be an existing file, got none."
    assert message(tmp_path / "no" / "xyz.toml") == (
        f"{tmp_path}/no/xyz.toml: must be an existing file, got none. There is no folder {tmp_path}/no either."
    )


def test_files_that_are_no_toml(tmp_path: Path) -> None:
    """A folder, other text, other bytes and a file far too long each have one sentence."""
    file = tmp_path / "a.toml"
    assert message(tmp_path) == f"{tmp_path}: must be a TOML file, got a folder."
    file.write_text("a = 1\nb == 2\n")
    assert message(file) == f"{file}:2:4: must be TOML, got invalid value."
    file.write_text("a = 1\na = 2\n")
    assert message(file).startswith(f"{file}:2:") and "overwrite" in message(file)
    file.write_bytes(b"a = 1 # \xff\n")
    assert message(file) == f"{file}: must be TOML, which is UTF-8 text, got byte 0xff at position 8."
    file.write_bytes(b"#" * (BYTES_MAX + 1))
    assert message(file) == f"{file}: must be a TOML file of at most {BYTES_MAX} bytes, got a longer one."
    file.write_text("a = " + "[" * 5000)
    assert message(file).startswith(f"{file}")
