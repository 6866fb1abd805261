"""Reading text files whole and replacing files whole, with errors people can act on.

A file is written under a temporary name in the folder of its target and renamed over it only when it is
complete and on the disk. At any moment the target is the whole old file or the whole new one.
Thread: control.
"""

from __future__ import annotations

import errno
import os
import secrets
import stat
from collections.abc import Iterator
from contextlib import contextmanager, suppress
from pathlib import Path

from liveres.errors import Fault, FileError, LiveresError, WriteError

_REASONS = {
    errno.ENOSPC: "the disk is full: free some space and try again",
    errno.EDQUOT: "the disk quota of this account is used up: free some space and try again",
    errno.EFBIG: "the file grew larger than this disk or account permits: write less of it, or write it elsewhere",
    errno.EROFS: "the disk is read-only: choose another place",
    errno.ENAMETOOLONG: "the name is too long for this disk: choose a shorter one",
    errno.EIO: "the disk failed (input/output error): choose another place",
}


def read_text(path: str | os.PathLike[str], most_bytes: int) -> str:
    """The text of a UTF-8 file, a leading byte-order mark dropped, line ends as they stand.

    most_bytes : no more than this is ever read
    Raises : FileError - the file is missing, a folder, a device or pipe, unreadable, too large, empty, or not UTF-8
    """
    try:
        mode = os.stat(path).st_mode
        if not (stat.S_ISREG(mode) or stat.S_ISDIR(mode)):
            # before it is opened: a pipe may never answer
            message = "it must be an ordinary file, got a device or pipe: save the text in a file first"
            raise FileError(path, [Fault("", message)])
        with open(path, "rb") as file:
            data = file.read(most_bytes + 1)
    except OSError as error:
        raise FileError(path, [Fault("", _unreadable(error))]) from None
    if len(data) > most_bytes:
        message = f"file must be at most {most_bytes / 2**20:g} MB, got a larger one: choose the right file"
        raise FileError(path, [Fault("", message)])
    try:
        text = data.decode("utf-8-sig")
    except UnicodeDecodeError as error:
        message = f"file must be UTF-8 text, got byte 0x{data[error.start]:02x}: save it as UTF-8, or choose the right file"
        raise FileError(path, [Fault("", message, data.count(b"\n", 0, error.start) + 1)]) from None
    if not text.strip():
        raise FileError(path, [Fault("", "file must not be empty: choose the right file, or write something into it")])
    return text


def number_text(number: float) -> str:
    """A number as files hold it: read back it is equal, and whole ones carry no point.

    >>> number_text(48000.0), number_text(0.1), number_text(float("-inf"))
    ('48000', '0.1', '-inf')
    """
    return str(int(number)) if abs(number) < 1e15 and number == int(number) else repr(float(number))


def _unreadable(error: OSError) -> str:
    if isinstance(error, FileNotFoundError | NotADirectoryError):
        return "file must exist, got none: check the name and the folder"
    if isinstance(error, IsADirectoryError):
        return "it must be a file, got a folder: name a file inside it"
    if isinstance(error, PermissionError):
        return "file must be readable, and permission was refused: change its permissions"
    return f"file cannot be read ({error.strerror}): check the disk"


def make_folder(path: str | os.PathLike[str]) -> None:
    """Make a folder and those above it, where they are missing.

    Raises : WriteError - a file is in the way; the folder above refuses; the disk is read-only or full
    """
    try:
        os.makedirs(path, exist_ok=True)
    except (FileExistsError, NotADirectoryError):
        raise WriteError(f"{path}: it must be a folder, and a file is in its way: choose another name") from None
    except OSError as error:
        raise WriteError(f"{path}: {_unwritable(error, Path(os.path.realpath(error.filename)).parent)}") from error


@contextmanager
def atomic_target(path: str | os.PathLike[str]) -> Iterator[Path]:
    """A temporary path to write instead of ``path``, which takes its place if the block ends well.

    The temporary file exists, is empty, lies in the target's folder and keeps its suffix. Leaving the block
    forces it to the disk and renames it over the target, whose permissions it takes on; a symbolic link stays
    and the file it points at is replaced. An error or interrupt inside the block removes the temporary file,
    leaves the target as it was and passes on; the body closes its file before it leaves the block.

    Raises : WriteError - the folder is missing or refuses; the target is a folder, a device or write-protected;
        the disk is full or failed
    """
    target = Path(os.path.realpath(path))
    mode = _check_target(path, target)
    temporary = target.with_name(f"{temporary_prefix(os.getpid())}{secrets.token_hex(8)}{target.suffix}")
    made = False
    try:
        os.close(os.open(temporary, os.O_CREAT | os.O_EXCL | os.O_WRONLY, 0o666))
        made = True
        yield temporary
        _flush(temporary)
        if mode is not None:
            os.chmod(temporary, mode)
        os.replace(temporary, target)
    except BaseException as error:
        if made:
            with suppress(FileNotFoundError):
                temporary.unlink()
        # an error of ours says enough; one about another file is not about this target
        if not isinstance(error, OSError) or isinstance(error, LiveresError):
            raise
        if error.filename is not None and str(error.filename) != str(temporary):
            raise
        raise WriteError(f"{path}: {_unwritable(error, target.parent)}") from error
    with suppress(OSError):  # the rename is done; not every disk can flush a folder
        _flush(target.parent)


def temporary_prefix(process: int) -> str:
    """What the temporary names of a process begin with, so that those of one that was killed can be told."""
    return f".{process}-"


def _check_target(path: object, target: Path) -> int | None:
    """Permission bits of an existing target, None where there is none; WriteError where it must not be replaced."""
    try:
        mode = target.stat().st_mode
    except FileNotFoundError:
        return None
    except OSError as error:
        raise WriteError(f"{path}: {_unwritable(error, target.parent)}") from error
    if stat.S_ISDIR(mode):
        raise WriteError(f"{path}: target must be a file, got a folder: name a file inside it")
    if not stat.S_ISREG(mode):
        raise WriteError(f"{path}: target must be an ordinary file, got a device or pipe: choose another name")
    try:
        # opened and left as it is, because the system gives its reason only then
        os.close(os.open(target, os.O_WRONLY))
    except PermissionError:
        raise WriteError(
            f"{path}: target must be writable, got a protected one: change its permissions or choose another name"
        ) from None
    except OSError as error:
        raise WriteError(f"{path}: {_unwritable(error, target.parent)}") from error
    return stat.S_IMODE(mode)


def _flush(path: Path) -> None:
    handle = os.open(path, os.O_RDONLY if path.is_dir() else os.O_RDWR)
    try:
        os.fsync(handle)
    finally:
        os.close(handle)


def _unwritable(error: OSError, folder: Path) -> str:
    if isinstance(error, FileNotFoundError) and folder.is_dir():
        # so say folders that only show what the system knows, such as /proc
        return f"folder {folder} must take new files, and takes none: choose another place"
    if isinstance(error, FileNotFoundError | NotADirectoryError):
        return f"folder {folder} must exist, got none: make it or choose another place"
    if isinstance(error, PermissionError):
        return f"folder {folder} must permit writing, and refused: change its permissions or choose another place"
    return _REASONS.get(error.errno or 0, f"the file cannot be written ({error.strerror}): choose another place")
