"""Which folders shelf files may be read from besides the project's own: what the user said, never what a file says.

It is said once, on the command line, and holds for the whole process, as a file mode mask does.
"""

from __future__ import annotations

import os
from collections.abc import Iterable
from pathlib import Path as FilePath

from budget.project.problems import ProjectError, printable

_folders: tuple[FilePath, ...] = ()


def allow(folders: Iterable[str]) -> None:
    """Let shelf files come from below these folders and no others; raises ProjectError, a sentence, for no folder."""
    global _folders
    folders = tuple(folders)
    for folder in folders:
        if not os.path.isdir(folder):
            raise ProjectError(f"{printable(folder, 200)} is no folder; one with shelf files was expected.")
    _folders = tuple(FilePath(os.path.realpath(folder)) for folder in folders)


def allowed(path: FilePath) -> bool:
    """Whether a file, its links followed, lies below a folder that was allowed."""
    return any(path.is_relative_to(folder) for folder in _folders)
