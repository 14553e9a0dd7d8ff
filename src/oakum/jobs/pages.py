"""Writing a page of HTML: whether it can be is found out before the long work begins."""

from __future__ import annotations

import os
from importlib.util import find_spec
from pathlib import Path

from oakum.errors import UsageError
from oakum.files import NewFile


class PageFile:
    """A page that will be written to a path."""

    def __init__(self, path: Path, *, overwrite: bool) -> None:
        """Raises UsageError when the path exists and must not be replaced, or no charts can be drawn."""
        if find_spec("matplotlib") is None:
            raise UsageError("--html needs a library that draws charts: pip install 'oakum[report]'")
        if not overwrite and os.path.lexists(path):
            raise UsageError(f"{path} exists; choose another name or give --overwrite")
        self._path, self._overwrite = path, overwrite

    def write(self, page: str) -> None:
        """Write the page, whole or not at all. Raises CannotCheck when that fails."""
        with NewFile(self._path.absolute(), overwrite=self._overwrite) as file:
            content = page.encode("utf-8")
            file.write(0, content)
            file.commit(len(content))
