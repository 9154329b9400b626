"""The import of measured spectra: the text of a file becomes a source."""

import asyncio
from typing import Annotated, Any

import numpy as np
from fastapi import APIRouter, Query, Request
from starlette.requests import ClientDisconnect

from server.errors import BadRequest, UnreadableFile
from server.middleware import UPLOAD_LIMIT_BYTES, read_body
from server.schemas import ImportedSpectrum, Preview, Suggested
from solver.columns import Strays, Unreadable
from solver.legend import AxisUnit, LevelUnit, Per
from solver.measured import Gaps, Imported, Negative, read_spectrum
from solver.sending import MeasuredSpectrum

router = APIRouter(prefix="/api/spectra", tags=["spectra"])

PREVIEW_POINTS = 400
_AT_ONCE = 2


@router.post(
    "",
    openapi_extra={
        "requestBody": {
            "required": True,
            "description": "The text of the file, in whatever encoding it has.",
            "content": {"text/plain": {"schema": {"type": "string"}}},
        }
    },
)
async def import_spectrum(
    request: Request,
    axis: Annotated[AxisUnit, Query(description="Unit of the first column.")] = "auto",
    level: Annotated[LevelUnit, Query(description="Scale of the levels.")] = "auto",
    per: Annotated[Per, Query(description="In which width the power was measured.")] = "auto",
    wavelength_nm: Annotated[
        float | None, Query(ge=400, le=2500, description="Carrier; the centre of gravity without.")
    ] = None,
    floor_db: Annotated[
        float | None, Query(ge=0, le=150, description="Take a floor so far below the top off.")
    ] = None,
    gaps: Annotated[Gaps, Query(description="What to do with gaps.")] = "bridge",
    negative: Annotated[Negative, Query(description="With negative linear powers.")] = "refuse",
    strays: Annotated[Strays, Query(description="With text among the numbers.")] = "refuse",
    column: Annotated[int, Query(ge=2, le=100, description="Column of the levels, from 1.")] = 2,
    name: Annotated[str, Query(max_length=200)] = "",
) -> ImportedSpectrum:
    """Make a measured spectrum a source; the remarks say what was recognized and changed."""
    try:
        data = await read_body(request.receive, UPLOAD_LIMIT_BYTES)
    except ClientDisconnect:
        raise BadRequest("the file broke off on its way: send it again") from None
    async with _turns(request):
        try:
            made = await asyncio.to_thread(
                read_spectrum,
                data,
                axis=axis,
                level=level,
                per=per,
                wavelength_nm=wavelength_nm,
                floor_db=floor_db,
                gaps=gaps,
                negative=negative,
                strays=strays,
                column=column,
                name=name,
            )
        except Unreadable as refusal:
            raise UnreadableFile(str(refusal), refusal.where) from None
    return _answer(made)


def _turns(request: Request) -> asyncio.Semaphore:
    """Large files are read one or two at a time, whoever sends them."""
    state = request.app.state
    if not hasattr(state, "imports"):
        state.imports = asyncio.Semaphore(_AT_ONCE)
    turns: asyncio.Semaphore = state.imports
    return turns


def _answer(made: Imported) -> ImportedSpectrum:
    measured = made.spectrum.model_dump(mode="json")
    source: dict[str, Any] = {"shape": "measured", "measured": measured}
    if made.wavelength_nm is not None:
        source["wavelength_nm"] = made.wavelength_nm
    return ImportedSpectrum(
        source=source,
        remarks=list(made.remarks),
        preview=_preview(made.spectrum),
        suggested=Suggested(floor_db=made.floor_db),
    )


def _preview(spectrum: MeasuredSpectrum) -> Preview:
    """Few enough points to draw, the highest of each group."""
    offset, density = np.array(spectrum.offset_ghz), np.array(spectrum.density)
    size = -(-density.size // PREVIEW_POINTS)
    starts = range(0, density.size, size)
    kept = [start + int(np.argmax(density[start : start + size])) for start in starts]
    return Preview(offset_ghz=offset[kept].tolist(), density=density[kept].tolist())
