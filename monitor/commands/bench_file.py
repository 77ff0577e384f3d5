"""Reading and replacing a bench file without ever leaving half of one."""

from __future__ import annotations

import os
from pathlib import Path

from monitor.commands import Refusal, Wrong


def read_bytes(path: Path) -> bytes | None:
    """What the file holds; None if there is no such file. Raises Wrong."""
    try:
        return path.read_bytes()
    except FileNotFoundError:
        return None
    except OSError as wrong:
        raise Wrong(f"{path}: {wrong.strerror}; expected a readable bench file") from None


def text_of(data: bytes | None, path: Path) -> str:
    """The file's text, '' for none. Raises Wrong."""
    try:
        return (data or b"").decode()
    except UnicodeDecodeError as wrong:
        raise Wrong(f"{path}: byte {wrong.start}: not UTF-8; expected TOML text") from None


def replace(path: Path, before: bytes | None, text: str) -> None:
    """Put `text` in the file's place, whole or not at all, if it still is what was read.

    Raises Refusal if it was changed meanwhile or cannot be written.
    """
    path = path.resolve()
    if read_bytes(path) != before:
        raise Refusal(f"{path}: changed by someone else meanwhile; nothing written, try again")
    temporary = path.with_name(f".{path.name}.new")
    try:
        mode = path.stat().st_mode & 0o7777 if before is not None else 0o644
        with open(os.open(temporary, os.O_WRONLY | os.O_CREAT | os.O_TRUNC, 0o600), "wb") as file:
            file.write(text.encode())
            file.flush()
            os.fchmod(file.fileno(), mode)
            os.fsync(file.fileno())
        temporary.replace(path)
        folder = os.open(path.parent, os.O_RDONLY)
        try:
            os.fsync(folder)
        finally:
            os.close(folder)
    except OSError as wrong:
        temporary.unlink(missing_ok=True)
        raise Refusal(f"{path}: cannot be written ({wrong.strerror}); it is as it was") from None
