"""The catalogue of fibres, for the page and for scripts."""

from typing import Annotated, Any

from fastapi import APIRouter, Query

from server.schemas import FibreClassRow, FibreKind, FibreList
from solver.catalogue import CLASSES, KINDS, Kind
from solver.experiment import Contradiction, Source

router = APIRouter(prefix="/api/fibres", tags=["fibres"])


@router.get("")
async def list_fibres(
    wavelength_nm: Annotated[
        float | None, Query(ge=400, le=2500, description="Carrier; each kind's own without it.")
    ] = None,
) -> FibreList:
    """Kinds of fibre with the parameters of their spans, and the sign of D of each ITU-T class.

    A kind whose figures do not hold at the carrier comes with those of its own wavelength, and
    with advice.
    """
    default_nm = Source.model_fields["wavelength_nm"].default
    carrier_nm = default_nm if wavelength_nm is None else wavelength_nm
    return FibreList(
        kinds=[_kind(kind, wavelength_nm) for kind in KINDS],
        classes=[
            FibreClassRow(
                key=known.key,
                title=known.title,
                source=known.source,
                sign=known.sign_at(carrier_nm),
                advice=known.advice(carrier_nm),
            )
            for known in CLASSES
        ],
    )


def _kind(kind: Kind, wavelength_nm: float | None) -> FibreKind:
    advice = ""
    span: dict[str, Any] = kind.fields()
    if wavelength_nm is not None:
        try:
            span = kind.fields(wavelength_nm)
        except Contradiction as error:
            advice = str(error)
    return FibreKind(
        key=kind.key,
        title=kind.title,
        group=kind.group,
        span=span,
        wavelength_nm=kind.wavelength_nm,
        range_nm=kind.range_nm,
        source=kind.source,
        note=kind.note,
        advice=advice,
    )
