"""What goes over the wire, and the one place where API addresses are built."""

from typing import Annotated, Any, Literal

from pydantic import BaseModel, ConfigDict, Field, StringConstraints

from server.lifecycle import State
from server.storage import RunRecord

Title = Annotated[str, StringConstraints(strip_whitespace=True, min_length=1, max_length=200)]
RunId = Annotated[str, StringConstraints(pattern=r"^[0-9a-f]{16}$")]


class Wire(BaseModel):
    """Base of request bodies: unknown names are refused."""

    model_config = ConfigDict(extra="forbid")


class ErrorDetail(BaseModel):
    """What went wrong, what to do, and which field is at fault (empty: none)."""

    code: str
    message: str
    where: str = ""


class ErrorBody(BaseModel):
    """The one shape of every error."""

    error: ErrorDetail


class Progress(BaseModel):
    """How far a run is; ``seconds_left`` is null while it cannot be told."""

    fraction: float
    realizations: int
    points_done: int
    points_total: int
    seconds_left: float | None = None


class Links(BaseModel):
    """Addresses of a run."""

    page: str
    events: str
    view: str
    result: str
    csv: str
    along: str
    picture: str


class RunRow(BaseModel):
    """One run as lists show it."""

    id: str
    title: str
    state: State
    created: str
    updated: str
    message: str
    progress: Progress
    problems: int
    links: Links


class RunDetail(RunRow):
    """A run with the study that it is."""

    study: dict[str, Any]


class RunList(BaseModel):
    """A page of runs, newest first."""

    runs: list[RunRow]
    total: int


class Deleted(BaseModel):
    """What was deleted and until when that can be undone."""

    deleted: str
    undo_until: str


class NewTitle(Wire):
    """Body that renames a run."""

    title: Title


class SessionRow(BaseModel):
    """One session as the list shows it."""

    id: str
    name: str
    created: str
    updated: str
    runs: int


class SessionList(BaseModel):
    """All sessions, the last changed first."""

    sessions: list[SessionRow]


class SessionDetail(BaseModel):
    """One session with its notes and runs."""

    id: str
    name: str
    notes: str
    created: str
    updated: str
    runs: list[RunRow]


class NewSession(Wire):
    """Body that opens a session."""

    name: Title


class SessionChange(Wire):
    """Body that renames a session or replaces its notes."""

    name: Title | None = None
    notes: Annotated[str, Field(max_length=200_000)] | None = None


class Reason(BaseModel):
    """What one effect asks of the window (ps) or of the band to either side (GHz)."""

    title: str
    value: float
    unit: str
    decides: bool


class Plan(BaseModel):
    """The grid chosen for a study, and why."""

    window_ps: float
    samples: int
    time_step_ps: float
    reasons: list[Reason]


class Health(BaseModel):
    """Whether the server answers and its workers are there."""

    status: Literal["ok"]
    workers: int
    engine: Literal["starting", "ready", "lost"]


class Access(BaseModel):
    """What the asker may do."""

    may: Literal["write", "look"]


class Preview(BaseModel):
    """A spectrum in few points: GHz from the carrier, and power per frequency over its top."""

    offset_ghz: list[float]
    density: list[float]


class Suggested(BaseModel):
    """Choices worth making at the next import; null where there is none."""

    floor_db: float | None


class ImportedSpectrum(BaseModel):
    """The part of a study's source that a file makes, and what was done to it."""

    source: dict[str, Any]
    remarks: list[str]
    preview: Preview
    suggested: Suggested


class FibreKind(BaseModel):
    """A kind of fibre: parameters of a span, length apart, and where they come from."""

    key: str
    title: str
    group: str
    span: dict[str, Any]
    wavelength_nm: float
    range_nm: tuple[float, float]
    source: str
    note: str
    advice: str


class FibreClassRow(BaseModel):
    """What a Recommendation says of the dispersion at the carrier."""

    key: str
    title: str
    source: str
    sign: Literal["normal", "either", "anomalous"]
    advice: str


class FibreList(BaseModel):
    """The catalogue."""

    kinds: list[FibreKind]
    classes: list[FibreClassRow]


def run_links(run_id: str) -> Links:
    """Every address of one run."""
    api = f"/api/runs/{run_id}"
    return Links(
        page=f"/runs/{run_id}",
        events=f"{api}/events",
        view=f"{api}/view",
        result=f"{api}/result",
        csv=f"{api}/curves.csv",
        along=f"{api}/along.csv",
        picture=f"{api}/picture.svg",
    )


def run_row(record: RunRecord, live: dict[str, Any] | None = None, problems: int = 0) -> RunRow:
    """The row of a run; ``live`` is its progress when it is under way."""
    stored = {
        "fraction": record.fraction,
        "realizations": record.realizations,
        "points_done": record.points_done,
        "points_total": record.points_total,
    }
    return RunRow(
        id=record.id,
        title=record.title,
        state=record.state,
        created=record.created,
        updated=record.updated,
        message=record.message,
        progress=Progress(**(live or stored)),
        problems=record.problems if live is None else problems,
        links=run_links(record.id),
    )
