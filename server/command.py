"""``crossdip run``: one study from a file, the same engine, one result file."""

import asyncio
import json
import sys
import tempfile
import time
from collections.abc import Mapping
from datetime import UTC, datetime
from pathlib import Path
from typing import TextIO

from pydantic import ValidationError

from server.engine import Engine
from server.errors import ServerError, SettingsError
from server.execution import Execution, News
from server.settings import Settings, read_settings
from server.validation import first_problem
from server.wording import explain, title_of
from solver.experiment import Study
from solver.result import StudyResult, write_result

BAR_WIDTH = 30
LINE_INTERVAL_S = 5.0


def read_study(name: str) -> Study:
    """The study in a JSON file, or on standard input for ``-``; raises SettingsError."""
    try:
        text = sys.stdin.read() if name == "-" else Path(name).read_text("utf-8")
    except (OSError, UnicodeDecodeError) as error:
        reason = getattr(error, "strerror", None) or "it is not UTF-8 text"
        raise SettingsError(f"cannot read {name}: {reason}") from None
    try:
        return Study.model_validate(json.loads(text))
    except json.JSONDecodeError as error:
        raise SettingsError(
            f"{name} is not JSON: line {error.lineno}, column {error.colno}: {error.msg}"
        ) from None
    except RecursionError:
        raise SettingsError(f"{name} is not a study: it is nested too deeply") from None
    except ValidationError as error:
        problem = first_problem(error.errors(), Study)
        place = f"{problem.where}: " if problem.where else ""
        raise SettingsError(f"{name}: {place}{problem.message}") from None


class ProgressBar:
    """One line that grows on a terminal; a plain line now and then elsewhere."""

    def __init__(self, stream: TextIO) -> None:
        self._stream = stream
        self._terminal = stream.isatty()
        self._last_s = -LINE_INTERVAL_S
        self._drawn = False

    def show(self, news: News) -> None:
        """Draw the progress of some news."""
        progress = news.progress
        fraction = float(progress["fraction"])
        left = progress["seconds_left"]
        text = (
            f"{100 * fraction:3.0f} %  {progress['points_done']}/{progress['points_total']} "
            f"points, {progress['realizations']} realizations"
        )
        if left is not None:
            text += f", {left:.0f} s left"
        moment_s = time.monotonic()
        if self._terminal:
            full = round(BAR_WIDTH * fraction)
            bar = "█" * full + "░" * (BAR_WIDTH - full)
            self._stream.write(f"\r\x1b[2K{bar} {text}")
            self._stream.flush()
            self._drawn = True
        elif moment_s - self._last_s >= LINE_INTERVAL_S:
            self._last_s = moment_s
            self._stream.write(f"{text}\n")
            self._stream.flush()

    def end(self) -> None:
        """Leave the line."""
        if self._drawn:
            self._stream.write("\n")


async def _compute(study: Study, settings: Settings, bar: ProgressBar) -> StudyResult:
    with tempfile.TemporaryDirectory(prefix="crossdip-", ignore_cleanup_errors=True) as scratch:
        engine = Engine(settings.workers, Path(scratch), settings.cluster)
        engine.start()
        execution = Execution(study, engine, bar.show)
        try:
            return await execution.conduct()
        finally:
            execution.close()
            await engine.stop()


def run_study(
    name: str,
    output: Path,
    title: str | None,
    flags: Mapping[str, object],
    environment: Mapping[str, str],
) -> int:
    """Compute and write; exit status. Raises SettingsError for input that cannot be used."""
    settings = read_settings(flags, environment)
    study = read_study(name)
    if not output.absolute().parent.is_dir():
        raise SettingsError(f"the folder of {output} does not exist: make it first")
    if output.is_dir():
        raise SettingsError(f"{output} is a folder: name a file to write")
    bar = ProgressBar(sys.stderr)
    created = datetime.now(UTC).isoformat(timespec="seconds").replace("+00:00", "Z")
    try:
        result = asyncio.run(_compute(study, settings, bar))
        bar.end()
        write_result(output, result, title=title or title_of(study), created=created)
    except (OSError, ServerError) as error:
        bar.end()
        reason = error.strerror if isinstance(error, OSError) else explain(error)
        print(f"crossdip: {output} was not written: {reason or error}", file=sys.stderr)
        return 1
    except KeyboardInterrupt:
        bar.end()
        print("crossdip: stopped; nothing was written", file=sys.stderr)
        return 130
    print(output)
    return 0
