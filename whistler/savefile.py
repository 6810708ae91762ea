"""Files that are whole or absent, whatever stops the program."""

from __future__ import annotations

import contextlib
import os
import sys
import tempfile
import traceback
from pathlib import Path

from whistler import __version__
from whistler.errors import Notice, OutputError


def write_whole(path: Path, content: bytes) -> bool:
    """Return whether the file was written; False when it held exactly that already.

    Parameters
    ----------
    path : Path
        File to make or replace. A symbolic link there is replaced, not followed.
    content : bytes
        All of it.

    Returns
    -------
    bool

    Raises
    ------
    OutputError
        When it cannot be written; the old file is then untouched.
    """
    try:
        if not path.is_symlink() and path.is_file() and path.read_bytes() == content:
            return False
        descriptor, name = tempfile.mkstemp(prefix=".", suffix=".part", dir=path.parent)
        try:
            with os.fdopen(descriptor, "wb") as file:
                file.write(content)
                file.flush()
                os.fsync(file.fileno())
            Path(name).chmod(0o666 & ~_umask())
            Path(name).replace(path)
        except BaseException:
            with contextlib.suppress(OSError):
                Path(name).unlink()
            raise
        _sync_folder(path.parent)
    except OSError as error:
        raise unwritable(path, error) from error
    return True


def prepare_folder(folder: Path) -> None:
    """Make a folder and check that files can be written there.

    Raises
    ------
    OutputError
        When they cannot.
    """
    try:
        folder.mkdir(parents=True, exist_ok=True)
        with tempfile.TemporaryFile(dir=folder) as probe:
            probe.write(b"writable")
    except OSError as error:
        raise unwritable(folder, error) from error


def unwritable(path: Path, error: OSError) -> OutputError:
    """Return the error that says why a path cannot be written."""
    reason = f"cannot be written ({error.strerror or error})"
    return OutputError(Notice("E401", str(path), reason, "free or choose another place"))


def save_fault(error: BaseException) -> Path:
    """Return the file in the temporary folder that now holds the traceback of an error."""
    descriptor, name = tempfile.mkstemp(prefix="whistler-fault-", suffix=".txt")
    with os.fdopen(descriptor, "w", encoding="utf-8", errors="backslashreplace") as file:
        file.write(f"whistler {__version__}, Python {sys.version}\n")
        file.writelines(traceback.format_exception(error))
    return Path(name)


def fault_notice(path: str, error: BaseException) -> Notice:
    """Return the line that reports an unexpected error, after saving its record."""
    reason = f"internal fault ({type(error).__name__}: {str(error)[:160]})"
    return Notice("E701", path, reason, f"please report it with its record, {save_fault(error)}")


def _umask() -> int:
    mask = os.umask(0o077)
    os.umask(mask)
    return mask


def _sync_folder(folder: Path) -> None:
    """Make a rename survive a power cut."""
    descriptor = os.open(folder, os.O_RDONLY)
    try:
        os.fsync(descriptor)
    finally:
        os.close(descriptor)
