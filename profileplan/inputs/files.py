"""What stands in a file: its text, or the fault that keeps it from being read."""

from __future__ import annotations

from typing import TYPE_CHECKING

from profileplan.errors import Fault, InputError

if TYPE_CHECKING:
    from pathlib import Path


def read_text(path: Path) -> str:
    """Return the text of a UTF-8 file, without byte order mark, line ends as they are.

    Parameters
    ----------
    path : Path
        The file.

    Raises
    ------
    InputError
        If it cannot be opened, or is not UTF-8.
    """
    try:
        data = path.read_bytes()
    except (OSError, ValueError) as error:
        raise InputError([Fault("", _why_unreadable(path, error), path)]) from None
    try:
        return data.decode("utf-8-sig")
    except UnicodeDecodeError as error:
        # positions of "utf-8-sig" count from behind the mark
        line = error.object[: error.start].count(b"\n") + 1
        byte = error.object[error.start]
        message = f"byte 0x{byte:02x} is not UTF-8; the file must be saved as UTF-8"
        raise InputError([Fault(f"line {line}", message, path)]) from None


def fingerprint(path: Path) -> str | None:
    """Return the SHA-256 of a file's bytes in hexadecimal (FIPS 180-4); None if it cannot be read.

    Parameters
    ----------
    path : Path
        The file.
    """
    import hashlib  # noqa: PLC0415 - few jobs need it, and it is slow to load

    try:
        with path.open("rb") as stream:
            return hashlib.file_digest(stream, "sha256").hexdigest()
    except OSError:
        return None


def _why_unreadable(path: Path, error: OSError | ValueError) -> str:
    match error:
        case FileNotFoundError():
            return "no such file"
        case OSError() if path.is_dir():
            return "is a directory; a file is needed"
        case PermissionError():
            return "cannot be read: permission denied"
        case OSError():
            return f"cannot be read: {error.strerror or error}"
        case _:
            return f"cannot be read: {error}"
