"""The further files a job names: out of its folder, or carried along with its text."""

from __future__ import annotations

from collections.abc import Callable, Mapping
from dataclasses import dataclass, field
from pathlib import Path

from synth.errors import JobError
from synth.quantities import what_came

__all__ = ["NamedFiles"]


@dataclass(frozen=True, kw_only=True)
class NamedFiles:
    """Where the files a job names are found, and what was taken of them.

    Parameters
    ----------
    folder
        Where they lie; not looked at where there are `texts`.
    texts
        Their content by name, as the job states it.
    """

    folder: Path | None = None
    texts: Mapping[str, str] | None = None
    _taken: dict[str, str] = field(default_factory=dict, init=False)

    @property
    def taken(self) -> tuple[tuple[str, str], ...]:
        """Name, as stated, and content of every file taken so far."""
        return tuple(self._taken.items())

    def take(self, stated: str, read: Callable[[Path], str]) -> tuple[str, str]:
        """The text of the file a job calls `stated`, and what to call it in messages.

        Parameters
        ----------
        read
            Gives the text of such a file from the folder.

        Raises
        ------
        JobError
            No such file, or nowhere to look for it; or what `read` refuses.
        """
        if self.texts is not None:
            if stated not in self.texts:
                held = ", ".join(what_came(each) for each in self.texts) or "none"
                raise JobError(
                    f"got {what_came(stated)}, expected one of the files that come with the job: "
                    f"{held}"
                )
            text, name = self.texts[stated], stated
        elif self.folder is not None:
            file = self.folder / stated
            text, name = read(file), str(file)
        else:
            raise JobError(
                f"got {what_came(stated)}, but this job comes without a folder to look in; "
                "expected a job read from a file"
            )
        self._taken[stated] = text
        return text, name
