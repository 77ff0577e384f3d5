"""Where the program keeps what: logs, the control socket, the lock of a bench."""

from __future__ import annotations

import hashlib
import os
import stat
from pathlib import Path

import platformdirs

from monitor.bench import Bench

SOCKET_PATH_MOST = 100  # bytes; AF_UNIX addresses end at 108


class PlaceError(OSError):
    """A folder or file is not safe to use; `str()` is the one line to show."""


def logs_folder(bench: Bench, bench_path: Path, chosen: Path | None) -> Path:
    """The folder of this bench's logs: the command line's, the bench file's, or our own."""
    if chosen is not None:
        return chosen.expanduser()
    if bench.logs.folder is not None:
        return (bench_path.parent / Path(bench.logs.folder).expanduser()).resolve()
    name = bench_path.name.removesuffix(".toml").removesuffix(".bench") or "bench"
    return Path(platformdirs.user_data_dir("stillbrine")) / "logs" / name


def private_folder(folder: Path) -> Path:
    """The folder, made with mode 0700 if it is not there.

    Raises PlaceError if it is somebody else's, or no folder.
    """
    folder.mkdir(mode=0o700, parents=True, exist_ok=True)
    info = folder.lstat()
    if not stat.S_ISDIR(info.st_mode) or info.st_uid != os.getuid():
        raise PlaceError(f"{folder}: not a folder of this user; expected one with mode 0700")
    return folder


def runtime_folder() -> Path:
    """Folder of control sockets, mode 0700: the user's runtime folder, or the state folder."""
    runtime = os.environ.get("XDG_RUNTIME_DIR")
    base = Path(runtime) if runtime else Path(platformdirs.user_state_dir())
    folder = private_folder(base / "stillbrine")
    if stat.S_IMODE(folder.lstat().st_mode) & 0o077:
        folder.chmod(0o700)
    return folder


def socket_path(bench_path: Path) -> Path:
    """The control socket of the service that runs this bench file."""
    whole = str(bench_path.resolve())
    name = hashlib.sha256(whole.encode()).hexdigest()[:16]
    path = runtime_folder() / f"{name}.sock"
    if len(os.fsencode(path)) >= SOCKET_PATH_MOST:
        raise PlaceError(f"{path}: too long for a socket; expected XDG_RUNTIME_DIR to be shorter")
    return path
