"""How does a file take its place: whole, or not at all?

A file is written under a temporary name in its own folder, brought to the disk and then put in
place, so that a reader finds the whole file, or the one that was there, or none.
"""

from __future__ import annotations

import io
import os
import secrets
from contextlib import contextmanager, suppress
from importlib import import_module
from typing import TYPE_CHECKING, BinaryIO

from profileplan.errors import Fault, InputError

if TYPE_CHECKING:
    from collections.abc import Iterator
    from pathlib import Path
    from types import ModuleType
    from typing import TextIO


NEW = os.O_WRONLY | os.O_CREAT | os.O_EXCL | getattr(os, "O_BINARY", 0)
"""A file that is not there yet, bytes as they are."""


class Replacements:
    r"""Files that take their places together, when the last of them is complete.

    Examples
    --------
    ::

        with replacing_all() as files:
            stream = files.open(Path("one.csv"))
            stream.write(b"t_s\r\n")
            files.close(stream)
    """

    def __init__(self) -> None:
        self._waiting: list[tuple[Path, Path, int]] = []
        self._targets: dict[int, Path] = {}
        self._streams: list[BinaryIO] = []

    def open(self, file: Path) -> BinaryIO:
        """Open a file that is put in place at the end; a device or a pipe is written at once.

        Raises
        ------
        InputError
            The file cannot be opened.
        """
        # Unlike pathlib's, it takes links in a circle as they are.
        file = type(file)(os.path.realpath(file))
        mode = 0o666 & ~_umask()
        try:
            if file.exists():
                mode = file.stat().st_mode & 0o777
                if not file.is_file():
                    # A device or a pipe holds nothing that could be half-written.
                    return self._known(file.open("wb"), file)
        except OSError as error:
            raise not_written(file, error) from error
        temporary = file.with_name(f".{file.name}.{secrets.token_hex(6)}.part")
        # It is known before it is there: an interrupt right behind its making removes it too.
        self._waiting.append((temporary, file, mode))
        try:
            # Until it takes its place it is nobody else's, whatever the old file allowed.
            stream = os.fdopen(os.open(temporary, NEW, mode=0o600), "wb")
        except OSError as error:
            self._waiting.pop()
            raise not_written(file, error) from error
        return self._known(stream, file)

    def close(self, stream: BinaryIO) -> None:
        """Bring a file to the disk; it is not in its place yet.

        Raises
        ------
        InputError
            It cannot be written.
        """
        file = self._targets[id(stream)]
        try:
            stream.flush()
            if any(file == target for _, target, _ in self._waiting):
                os.fsync(stream.fileno())
            stream.close()
        except OSError as error:
            raise not_written(file, error) from error
        self._streams.remove(stream)

    def write(self, stream: BinaryIO, content: bytes) -> None:
        """Write to a file.

        Raises
        ------
        InputError
            It cannot be written.
        """
        try:
            stream.write(content)
        except OSError as error:
            raise not_written(self._targets[id(stream)], error) from error

    def finish(self) -> None:
        """Close what is open, and put all files in their places."""
        for stream in tuple(self._streams):
            self.close(stream)
        folders = set()
        while self._waiting:
            temporary, file, mode = self._waiting[0]
            try:
                temporary.chmod(mode)
                temporary.replace(file)
            except OSError as error:
                raise not_written(file, error) from error
            self._waiting.pop(0)
            folders.add(file.parent)
        for folder in folders:
            _keep_names(folder)

    def abandon(self) -> None:
        """Remove what is not in its place."""
        for stream in self._streams:
            # What could not be written before cannot be written now either.
            with suppress(OSError):
                stream.close()
        for temporary, _, _ in self._waiting:
            temporary.unlink(missing_ok=True)

    def _known(self, stream: BinaryIO, file: Path) -> BinaryIO:
        self._targets[id(stream)] = file
        self._streams.append(stream)
        return stream


@contextmanager
def replacing_all() -> Iterator[Replacements]:
    """Return files that take their places when all are complete, and leave the old ones else.

    Raises
    ------
    InputError
        A file cannot be written.
    """
    files = Replacements()
    try:
        yield files
        files.finish()
    finally:
        files.abandon()


@contextmanager
def replacing(file: Path) -> Iterator[TextIO]:
    """Open a text file that takes its place only when it was written to the end.

    Raises
    ------
    InputError
        The file cannot be written.
    """
    with replacing_all() as files:
        stream = files.open(file)
        text = io.TextIOWrapper(stream, encoding="utf-8", newline="", write_through=False)
        try:
            yield text
            text.flush()
        except OSError as error:
            raise not_written(file, error) from error
        finally:
            with suppress(OSError):
                text.detach()


def not_written(file: Path, error: OSError) -> InputError:
    """Return the fault of a file that could not be written."""
    return InputError([Fault("", f"cannot be written: {error.strerror or error}", file)])


def parquet_libraries(file: Path) -> tuple[ModuleType, ModuleType]:
    """Return pyarrow, and its part that reads and writes Parquet.

    Raises
    ------
    InputError
        It is not installed.
    """
    try:
        return import_module("pyarrow"), import_module("pyarrow.parquet")
    except ImportError as error:
        message = "Parquet needs pyarrow: install profileplan[parquet], or take another form"
        raise InputError([Fault("", message, file)]) from error


def _umask() -> int:
    """Return the process's mask of file permissions; reading it means setting it twice."""
    mask = os.umask(0o022)
    os.umask(mask)
    return mask


def _keep_names(folder: Path) -> None:
    """Bring a folder's names to the disk, where the system can do that."""
    with suppress(OSError):
        handle = os.open(folder, os.O_RDONLY)
        try:
            os.fsync(handle)
        finally:
            os.close(handle)
