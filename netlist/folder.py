"""Folders written whole or not at all.

The files go into a hidden folder beside the destination, reach the disk, and take the place of
the destination in one step: an exchange of the two names where the system offers one (Linux),
otherwise two renames.  A process killed at any moment leaves the old folder or the new one; what
it may leave beside it is removed by the next run, which also puts back an old folder that was
caught between the two renames.  A lock on each hidden folder tells leftovers from the work of a
process that still runs.

Other files in the destination, which a user may have put there, stay in it.
"""

from __future__ import annotations

import contextlib
import ctypes
import errno
import fcntl
import hashlib
import os
import secrets
import shutil
from collections.abc import Callable, Collection, Iterator, Mapping
from pathlib import Path

from synth.errors import JobError

__all__ = ["check_destination", "write_folder"]

_AT_FDCWD, _RENAME_EXCHANGE = -100, 2
_ATTEMPTS = 10
_ASIDE = ".old"


def check_destination(folder: Path, *, is_ours: Callable[[Path], bool]) -> None:
    """Refuse a destination that cannot be written or holds something else.

    Parameters
    ----------
    folder
        Where the files are to go.
    is_ours
        Tells whether an existing folder may be replaced; an empty one always may.

    Raises
    ------
    JobError
        One line: what stands in the way.
    """
    with _explained(folder):
        real = Path(os.path.realpath(folder))
        if real.exists():
            if not real.is_dir():
                raise JobError(f"cannot write to {_shown(folder)}: it is a file, expected a folder")
            if any(real.iterdir()) and not is_ours(real):
                raise JobError(
                    f"cannot write to {_shown(folder)}: it holds files but no earlier result of "
                    "this program; expected a folder that is new, empty or an earlier result"
                )
            if os.path.ismount(real):
                raise JobError(
                    f"cannot write to {_shown(folder)}: a mount point cannot be replaced in one "
                    "step, expected a folder inside it"
                )
        above = real.parent
        while not above.exists():
            above = above.parent
        if not above.is_dir():
            raise JobError(f"cannot write to {_shown(folder)}: {_shown(above)} is a file")
        if not os.access(above, os.W_OK | os.X_OK):
            raise JobError(
                f"cannot write to {_shown(folder)}: no permission to create it in {_shown(above)}"
            )


def write_folder(
    folder: Path, files: Mapping[str, bytes], *, is_ours: Callable[[Path], bool]
) -> None:
    """Write `files` (name to content) as the folder `folder`, whole or not at all.

    Raises
    ------
    JobError
        The destination cannot be written or holds something else; nothing has changed then.
    """
    check_destination(folder, is_ours=is_ours)
    with _explained(folder):
        real = Path(os.path.realpath(folder))
        real.parent.mkdir(parents=True, exist_ok=True)
        _sweep(real)
        fresh, lock = _hidden_folder(real)
        try:
            for name, content in files.items():
                _write_file(fresh / name, content)
            if real.is_dir():
                shutil.copymode(real, fresh)
                _carry_over(real, fresh, without=files.keys())
            _sync(fresh)
            _swap(fresh, real)
            _sync(real.parent)
        finally:
            # The hidden folder now holds the old files, or new ones that found no place.
            shutil.rmtree(fresh, ignore_errors=True)
            os.close(lock)


def _write_file(path: Path, content: bytes) -> None:
    with path.open("xb") as stream:
        stream.write(content)
        stream.flush()
        os.fsync(stream.fileno())


def _carry_over(old: Path, fresh: Path, *, without: Collection[str]) -> None:
    """Link what else lies in `old` into `fresh`, or copy it where links are not possible."""
    for entry in sorted(old.iterdir()):
        if entry.name in without:
            continue
        if entry.is_dir() and not entry.is_symlink():
            shutil.copytree(entry, fresh / entry.name, symlinks=True, copy_function=_link_or_copy)
        else:
            _link_or_copy(str(entry), str(fresh / entry.name))


def _link_or_copy(source: str, destination: str) -> str:
    try:
        os.link(source, destination, follow_symlinks=False)
    except OSError:
        shutil.copy2(source, destination, follow_symlinks=False)
    return destination


def _sync(folder: Path) -> None:
    descriptor = os.open(folder, os.O_RDONLY)
    try:
        os.fsync(descriptor)
    finally:
        os.close(descriptor)


def _prefix(real: Path) -> str:
    """Start of the names of hidden folders for this destination, short whatever its name."""
    return f".polewright-{hashlib.sha256(os.fsencode(real.name)).hexdigest()[:8]}-"


def _hidden_folder(real: Path) -> tuple[Path, int]:
    """A new hidden folder beside `real` and the descriptor of the lock on it."""
    for _ in range(_ATTEMPTS):
        path = real.parent / f"{_prefix(real)}{secrets.token_hex(4)}"
        try:
            path.mkdir()
        except FileExistsError:
            continue
        lock = _locked(path)
        if lock is not None and path.exists():
            return path, lock
        if lock is not None:
            os.close(lock)
    raise OSError(errno.EBUSY, "another process is writing there")


def _locked(path: Path) -> int | None:
    """A descriptor that holds the lock on a folder; None if it is taken or gone."""
    try:
        descriptor = os.open(path, os.O_RDONLY)
    except OSError:
        return None
    try:
        fcntl.flock(descriptor, fcntl.LOCK_EX | fcntl.LOCK_NB)
    except OSError:
        os.close(descriptor)
        return None
    return descriptor


def _sweep(real: Path) -> None:
    """Remove what a killed process left beside `real`, and put back what it had moved aside."""
    for path in sorted(real.parent.glob(f"{_prefix(real)}*")):
        lock = _locked(path)
        if lock is None:
            continue
        try:
            if path.name.endswith(_ASIDE) and not real.exists():
                path.rename(real)
            else:
                shutil.rmtree(path, ignore_errors=True)
        finally:
            os.close(lock)


def _swap(fresh: Path, real: Path) -> None:
    """Put `fresh` at the name `real`; what was there ends at the name `fresh`, or is gone."""
    for _ in range(_ATTEMPTS):
        try:
            fresh.rename(real)  # works where nothing is there, or an empty folder
        except OSError as error:
            if error.errno not in (errno.ENOTEMPTY, errno.EEXIST):
                raise
        else:
            return
        if _exchange(fresh, real):
            return
        if _two_renames(fresh, real):
            return
    raise OSError(errno.EBUSY, "another process keeps writing there")


def _two_renames(fresh: Path, real: Path) -> bool:
    """Move `real` aside and `fresh` in; False when another process is doing the same."""
    lock = _locked(real)  # it stays on the folder when its name changes
    if lock is None:
        return False
    aside = fresh.with_name(fresh.name + _ASIDE)
    try:
        real.rename(aside)
        try:
            fresh.rename(real)
        except BaseException:
            aside.rename(real)
            raise
        shutil.rmtree(aside, ignore_errors=True)
        return True
    finally:
        os.close(lock)


def _exchange(one: Path, other: Path) -> bool:
    """Exchange two names in one step; False where the system or the disk cannot."""
    try:
        call = ctypes.CDLL(None, use_errno=True).renameat2
    except (OSError, AttributeError):
        return False
    done: int = call(
        _AT_FDCWD, os.fsencode(one), _AT_FDCWD, os.fsencode(other), ctypes.c_uint(_RENAME_EXCHANGE)
    )
    if done == 0:
        return True
    code = ctypes.get_errno()
    if code in (errno.ENOSYS, errno.EINVAL, errno.ENOENT):
        return False
    raise OSError(code, os.strerror(code))


@contextlib.contextmanager
def _explained(folder: Path) -> Iterator[None]:
    """Turn the system's refusals into one line."""
    try:
        yield
    except OSError as error:
        reason = error.strerror or type(error).__name__
        raise JobError(f"cannot write to {_shown(folder)}: {reason.lower()}") from error
    except ValueError as error:
        if isinstance(error, JobError):
            raise
        raise JobError(f"cannot write to {_shown(folder)}: {error}") from error


def _shown(path: Path) -> str:
    """A path as one printable line."""
    text = str(path)
    return text if text.isprintable() else repr(text)
