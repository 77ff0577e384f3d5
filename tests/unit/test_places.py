"""Folders, locks and files of secrets: only the user's own."""

from __future__ import annotations

import os
import stat
from pathlib import Path

import pytest

from monitor.bench import parse
from monitor.places import (
    HeldError,
    Lock,
    PlaceError,
    logs_folder,
    private_folder,
    secret,
    socket_path,
)


def test_folders_are_private(tmp_path: Path, monkeypatch: pytest.MonkeyPatch) -> None:
    made = private_folder(tmp_path / "a" / "b")
    assert stat.S_IMODE(made.stat().st_mode) == 0o700
    (tmp_path / "link").symlink_to(tmp_path / "a")
    with pytest.raises(PlaceError, match="not a folder of this user"):
        private_folder(tmp_path / "link")
    (tmp_path / "file").write_text("")
    with pytest.raises(PlaceError, match="expected a folder that can be written"):
        private_folder(tmp_path / "file" / "below")
    monkeypatch.setattr(os, "getuid", lambda: 4711)
    with pytest.raises(PlaceError, match="not a folder of this user"):
        private_folder(made)


def test_socket_folder_is_closed_to_others(tmp_path: Path, monkeypatch: pytest.MonkeyPatch) -> None:
    monkeypatch.setenv("XDG_RUNTIME_DIR", str(tmp_path))
    (tmp_path / "stillbrine").mkdir(mode=0o755)
    path = socket_path(tmp_path / "bench.toml")
    assert stat.S_IMODE(path.parent.stat().st_mode) == 0o700
    assert path == socket_path(tmp_path / "." / "bench.toml")
    assert path != socket_path(tmp_path / "other.toml")
    long = tmp_path / ("x" * 80)
    long.mkdir()
    monkeypatch.setenv("XDG_RUNTIME_DIR", str(long))
    with pytest.raises(PlaceError, match="too long for a socket"):
        socket_path(tmp_path / "bench.toml")


def test_a_lock_has_one_holder_and_dies_with_it(tmp_path: Path) -> None:
    with Lock(tmp_path / ".lock", "x"):
        with pytest.raises(HeldError, match="in use"), Lock(tmp_path / ".lock", "in use"):
            pass
        pid = os.fork()
        if pid == 0:
            os._exit(0)
        os.waitpid(pid, 0)
    with Lock(tmp_path / ".lock", "x"):
        assert stat.S_IMODE((tmp_path / ".lock").stat().st_mode) == 0o600
    (tmp_path / "trap").symlink_to(tmp_path / "elsewhere")
    with pytest.raises(PlaceError), Lock(tmp_path / "trap", "x"):
        pass
    assert not (tmp_path / "elsewhere").exists()


def test_where_logs_go(tmp_path: Path) -> None:
    path = tmp_path / "bench.toml"
    assert logs_folder(parse('[logs]\nfolder = "night"'), path, None) == tmp_path / "night"
    assert logs_folder(parse('[logs]\nfolder = "night"'), path, Path("/x")) == Path("/x")
    assert logs_folder(parse(""), path, None).parts[-3:] == ("stillbrine", "logs", "bench")


def test_secrets_are_private_and_never_repeated(tmp_path: Path) -> None:
    path = tmp_path / "secrets"
    path.write_text("hunter2")
    path.chmod(0o600)
    assert secret(path) == "hunter2"
    path.chmod(0o640)
    with pytest.raises(PlaceError) as wrong:
        secret(path)
    assert str(wrong.value) == "secrets: open to others; expected your own, of mode 0600"
    path.chmod(0o600)
    (tmp_path / "link").symlink_to(path)
    with pytest.raises(PlaceError):
        secret(tmp_path / "link")
    with pytest.raises(PlaceError, match="No such file"):
        secret(tmp_path / "none")
    with pytest.raises(PlaceError):
        secret(tmp_path)
    os.mkfifo(tmp_path / "pipe", 0o600)
    with pytest.raises(PlaceError):
        secret(tmp_path / "pipe")
    path.write_bytes(b"\xff\xfe")
    with pytest.raises(PlaceError, match="not text"):
        secret(path)
