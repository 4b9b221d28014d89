"""Text files the user names: read whole, in UTF-8, or one clear error."""

from __future__ import annotations

from pathlib import Path

from synth.errors import JobError
from synth.quantities import what_came

__all__ = ["read_text_file"]


def read_text_file(file: Path, *, largest: int, expected: str, kind: str = "") -> str:
    """The text of a file, a byte order mark at its start left out.

    Parameters
    ----------
    largest
        Most bytes it may have.
    expected, kind
        What it should be, such as ``"a job file"``, and what to add of its format where
        there is no file at all, such as ``" in TOML"``.

    Raises
    ------
    JobError
        No such file, no regular one, too long, or not UTF-8.
    """
    data = _bytes_of(file, largest=largest, expected=expected, kind=kind)
    if len(data) > largest:
        raise JobError(f"{file}: got more than {largest} bytes, expected {expected}")
    try:
        return data.decode("utf-8-sig")
    except UnicodeDecodeError as error:
        raise JobError(
            f"{file}: got a byte {data[error.start]:#04x} at position {error.start}, "
            "expected text in UTF-8"
        ) from None


def _bytes_of(file: Path, *, largest: int, expected: str, kind: str) -> bytes:
    """The content of a file, cut off when it is far too long."""
    try:
        came = "a folder" if file.is_dir() else "no regular file"
        regular = file.is_file() or not file.exists()
        if regular:
            with file.open("rb") as stream:
                return stream.read(largest + 1)
    except FileNotFoundError:
        raise JobError(f"{file}: no such file, expected {expected}{kind}") from None
    except OSError as error:
        raise JobError(f"{what_came(str(file))}: cannot be read: {error.strerror}") from None
    except ValueError as error:
        raise JobError(f"{what_came(str(file))}: cannot be read: {error}") from None
    raise JobError(f"{file}: got {came}, expected {expected}")
