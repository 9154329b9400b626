"""What an unfinished run has so far, one small file for each of its chains.

A checkpoint survives the end of the server process. After a power cut a file may be damaged:
it is then ignored and its chain begins again, so the files need no fsync.
"""

import contextlib
import io
import logging
import shutil
import zipfile
from collections.abc import Iterator
from pathlib import Path

import numpy as np

_log = logging.getLogger("crossdip.checkpoints")

Arrays = dict[str, np.ndarray]


class Checkpoints:
    """The checkpoint folder of one run. Every method blocks."""

    def __init__(self, folder: Path) -> None:
        self._folder = folder

    def save(self, variant: int, point: int, arrays: Arrays) -> None:
        """Replace the chain's checkpoint as a whole; raises OSError when it cannot be written."""
        buffer = io.BytesIO()
        np.savez(buffer, allow_pickle=False, **arrays)
        self._folder.mkdir(parents=True, exist_ok=True)
        path = self._folder / f"{variant}-{point}.npz"
        temporary = path.with_suffix(".new")
        try:
            temporary.write_bytes(buffer.getbuffer())
            temporary.replace(path)
        except OSError:
            with contextlib.suppress(OSError):
                temporary.unlink()
            raise

    def load(self) -> Iterator[tuple[int, int, Arrays]]:
        """(variant, point, arrays) of every readable checkpoint."""
        for path in sorted(self._folder.glob("*-*.npz")):
            try:
                variant, point = (int(part) for part in path.stem.split("-"))
                with np.load(path, allow_pickle=False) as archive:
                    arrays = {name: archive[name] for name in archive.files}
            except (OSError, ValueError, EOFError, KeyError, zipfile.BadZipFile) as error:
                _log.warning("the damaged checkpoint %s is left out: %s", path.name, error)
                continue
            yield variant, point, arrays

    def remove(self) -> None:
        """Delete the folder."""
        shutil.rmtree(self._folder, ignore_errors=True)
