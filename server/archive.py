"""The files of runs: results, checkpoints, and the few results kept open in memory.

Methods block, except where they say otherwise.
"""

from collections import OrderedDict
from pathlib import Path

from server.checkpoints import Checkpoints
from server.errors import NotFound
from server.settings import Settings
from server.storage import RunRecord
from solver.experiment import Study
from solver.result import StudyResult, read_result, write_result
from solver.study import StudyState

_KEPT = 3


class Archive:
    """The results and checkpoints of one data folder."""

    def __init__(self, settings: Settings) -> None:
        self._results = settings.results
        self._checkpoints = settings.checkpoints
        self._open: OrderedDict[tuple[str, str], StudyResult] = OrderedDict()

    def sweep(self, known: set[str]) -> None:
        """Remove what a crash or a final deletion left behind: ``known`` runs have a row."""
        self._results.mkdir(parents=True, exist_ok=True)
        self._checkpoints.mkdir(parents=True, exist_ok=True)
        for path in self._results.iterdir():
            if path.suffix != ".h5" or path.stem not in known:
                path.unlink()
        for folder in self._checkpoints.iterdir():
            if folder.name not in known:
                Checkpoints(folder).remove()

    def path(self, run_id: str) -> Path:
        """Where the result file of a run is or will be."""
        return self._results / f"{run_id}.h5"

    def checkpoints(self, run_id: str) -> Checkpoints:
        """The checkpoints of a run."""
        return Checkpoints(self._checkpoints / run_id)

    def write(self, record: RunRecord, result: StudyResult) -> None:
        """Write the result file as a whole; raises OSError when the disk refuses."""
        self._results.mkdir(parents=True, exist_ok=True)
        write_result(self.path(record.id), result, title=record.title, created=record.created)

    def read(self, record: RunRecord) -> StudyResult:
        """All that the disk holds of a run: its result, or what its checkpoints add up to.

        Raises NotFound when the result file is gone.
        """
        if record.state == "done":
            try:
                return read_result(self.path(record.id))
            except (OSError, ValueError, KeyError) as error:
                raise NotFound(
                    "the result file is missing, damaged or of an earlier version: "
                    "delete the run and run it again"
                ) from error
        state = StudyState(Study.model_validate_json(record.study))
        for variant, point, arrays in self.checkpoints(record.id).load():
            state.restore(variant, point, arrays)
        return state.result()

    def kept(self, record: RunRecord) -> StudyResult | None:
        """The result in memory, where there is one; does not block."""
        return self._open.get(_version(record))

    def keep(self, record: RunRecord, result: StudyResult) -> None:
        """Hold a result in memory in place of the one used longest ago; does not block."""
        self._open[_version(record)] = result
        self._open.move_to_end(_version(record))
        while len(self._open) > _KEPT:
            self._open.popitem(last=False)


def _version(record: RunRecord) -> tuple[str, str]:
    """What changes when the result of a run may have changed."""
    return record.id, record.state + record.updated
