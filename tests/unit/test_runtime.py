"""The runtime folder belongs to this user alone."""

import os
from pathlib import Path

import pytest

from rtctl.config.runtime import runtime_folder, socket_endpoint
from rtctl.errors import SetupError


def test_made_and_private(tmp_path: Path, monkeypatch: pytest.MonkeyPatch) -> None:
    """The folder is made below XDG_RUNTIME_DIR, and nobody else may enter it."""
    monkeypatch.setenv("XDG_RUNTIME_DIR", str(tmp_path))
    folder = runtime_folder()
    assert folder == tmp_path / "rtctl"
    assert folder.stat().st_mode & 0o777 == 0o700
    assert runtime_folder() == folder


def test_below_the_temporary_folder(tmp_path: Path, monkeypatch: pytest.MonkeyPatch) -> None:
    """Without XDG_RUNTIME_DIR the folder's name carries the user's number."""
    monkeypatch.delenv("XDG_RUNTIME_DIR", raising=False)
    monkeypatch.setenv("TMPDIR", str(tmp_path))
    assert runtime_folder() == tmp_path / f"rtctl-{os.getuid()}"


def test_open_folder_and_link_are_refused(tmp_path: Path, monkeypatch: pytest.MonkeyPatch) -> None:
    """A folder that others may enter, or a link to one, could be somebody's trap: refused, not repaired."""
    monkeypatch.setenv("XDG_RUNTIME_DIR", str(tmp_path))
    (tmp_path / "rtctl").mkdir()
    (tmp_path / "rtctl").chmod(0o755)
    with pytest.raises(SetupError) as caught:
        runtime_folder()
    assert str(caught.value) == (
        f"{tmp_path}/rtctl: must be a folder of this user that nobody else may enter, got owner {os.getuid()} and mode 755. "
        "Remove it, or set XDG_RUNTIME_DIR to a private folder."
    )
    (tmp_path / "rtctl").rmdir()
    (tmp_path / "elsewhere").mkdir(mode=0o700)
    (tmp_path / "rtctl").symlink_to(tmp_path / "elsewhere")
    with pytest.raises(SetupError):
        runtime_folder()


def test_endpoints(tmp_path: Path, monkeypatch: pytest.MonkeyPatch) -> None:
    """A name becomes a path in the runtime folder; a full endpoint stays."""
    monkeypatch.setenv("XDG_RUNTIME_DIR", str(tmp_path))
    assert socket_endpoint("ipc://arm-state") == f"ipc://{tmp_path}/rtctl/arm-state"
    assert socket_endpoint("ipc:///run/x") == "ipc:///run/x"
