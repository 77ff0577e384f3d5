"""Where the program keeps what: logs, the control socket, the lock of a bench."""

from __future__ import annotations

import fcntl
import hashlib
import os
import stat
from pathlib import Path

import platformdirs

from monitor.bench import Bench

SECRET_MOST = 65536
SOCKET_PATH_MOST = 100  # bytes; AF_UNIX addresses end at 108


class PlaceError(OSError):
    """A folder or file is not safe to use; `str()` is the one line to show."""


class HeldError(PlaceError):
    """Another process holds this lock."""


class Lock:
    """A context manager: one holder at a time, gone with its process however that ends."""

    def __init__(self, path: Path, act: str) -> None:
        """`act`: what the holder does, for the line that refuses a second one."""
        self.path = path
        self._act = act
        self._fd = -1

    def __enter__(self) -> Lock:
        """Take it. Raises HeldError if another process has it, PlaceError if it cannot be made."""
        flags = os.O_CREAT | os.O_RDWR | os.O_NOFOLLOW | os.O_CLOEXEC
        try:
            self._fd = os.open(self.path, flags, 0o600)
            fcntl.flock(self._fd, fcntl.LOCK_EX | fcntl.LOCK_NB)
        except BlockingIOError:
            os.close(self._fd)
            raise HeldError(f"{self.path.parent}: {self._act}") from None
        except OSError as wrong:
            said = f"{self.path}: {wrong.strerror}; expected a folder that can be written"
            raise PlaceError(said) from None
        return self

    def __exit__(self, *_: object) -> None:
        os.close(self._fd)


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
    try:
        folder.mkdir(mode=0o700, parents=True, exist_ok=True)
        info = folder.lstat()
    except OSError as wrong:
        said = f"{folder}: {wrong.strerror}; expected a folder that can be written"
        raise PlaceError(said) from None
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


def secret(path: Path) -> str:
    """The text of a file of secrets. Raises PlaceError, which names no part of it."""
    try:
        fd = os.open(path, os.O_RDONLY | os.O_NOFOLLOW | os.O_NONBLOCK | os.O_CLOEXEC)
        with os.fdopen(fd, "rb") as file:
            info = os.fstat(fd)
            private = stat.S_ISREG(info.st_mode) and not stat.S_IMODE(info.st_mode) & 0o077
            if not private or info.st_uid not in (os.getuid(), 0):
                raise PlaceError(f"{path.name}: open to others; expected your own, of mode 0600")
            return file.read(SECRET_MOST).decode()
    except PlaceError:
        raise
    except OSError as wrong:
        said = f"{path.name}: {wrong.strerror}; expected a readable file of mode 0600"
        raise PlaceError(said) from None
    except UnicodeDecodeError:
        raise PlaceError(f"{path.name}: not text; expected UTF-8") from None


def socket_path(bench_path: Path) -> Path:
    """The control socket of the service that runs this bench file."""
    whole = str(bench_path.resolve())
    name = hashlib.sha256(whole.encode()).hexdigest()[:16]
    path = runtime_folder() / f"{name}.sock"
    if len(os.fsencode(path)) >= SOCKET_PATH_MOST:
        raise PlaceError(f"{path}: too long for a socket; expected XDG_RUNTIME_DIR to be shorter")
    return path
