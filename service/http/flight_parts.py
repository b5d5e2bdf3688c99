"""The parts of a kept flight's result: calibration, wind, faults from its summary; the series from their store."""

import math
from typing import Any

from flask import Blueprint, Request, Response, request

from schemas.fields import Answer
from schemas.flight import cautions, dump_part
from schemas.reduction import AirspeedSchema, StallMarginsSchema
from schemas.series_csv import csv_series
from service.domain.errors import WrongValues
from service.domain.kept import JobState, ReductionRecord
from service.http.access import caller
from service.http.answers import JSON, json_answer, require_json_accepted
from service.http.conditions import revalidated
from service.http.failures import NothingAcceptable, NotReducedYet
from service.http.query import require_known
from service.keeping import CLOSED, Keeping, Stores, series_piece, shown_reduction
from service.storage.series_file import Group, SeriesPart

URL = "/v1/flights/<flight>"
CSV = "text/csv"
SLICE = ("from_s", "to_s", "step_s")
SERIES_SCHEMAS: dict[Group, type[Answer]] = {"airspeed": AirspeedSchema, "stall_margins": StallMarginsSchema}
LONGEST_NUMBER = 40


def add_parts(blueprint: Blueprint, keeping: Keeping) -> None:
    """Add the calls of the parts to the blueprint of the flights."""

    @blueprint.get(f"{URL}/calibration")
    def calibration(flight: str) -> Response:
        return _from_summary(keeping, flight, lambda summary: summary["calibration"])

    @blueprint.get(f"{URL}/wind")
    def wind(flight: str) -> Response:
        return _from_summary(keeping, flight, lambda summary: {**summary["wind"], "loiters": summary["loiters"]})

    @blueprint.get(f"{URL}/faults")
    def faults(flight: str) -> Response:
        return _from_summary(keeping, flight, lambda summary: {"faults": summary["faults"]})

    @blueprint.get(f"{URL}/airspeed")
    def airspeed(flight: str) -> Response:
        return _series_answer(keeping, flight, "airspeed", ())

    @blueprint.get(f"{URL}/stall-margins")
    def stall_margins(flight: str) -> Response:
        return _series_answer(keeping, flight, "stall_margins", ("stall_margins_absent", "stall_warnings"))


def series_asked_for(kept: Stores, reduction: ReductionRecord, include: frozenset[str]) -> dict[str, Any]:
    """The whole series named in `include`, as in the answer to a one-shot request: null where there is none."""
    found = {part: series_piece(kept, reduction, part) for part in SERIES_SCHEMAS if part in include}
    return {part: None if piece is None else _dumped(part, piece) for part, piece in found.items()}


def _from_summary(keeping: Keeping, flight: str, part_of: Any) -> Response:
    require_json_accepted(request)
    require_known(request, ("reduction",))
    reduction = _result(keeping.stores(), flight, request)
    return revalidated(json_answer(dump_part(reduction, part_of(reduction.summary))), request)


def _series_answer(keeping: Keeping, flight: str, part: Group, beside: tuple[str, ...]) -> Response:
    media_type = _media_type(request)
    require_known(request, (*SLICE, "reduction"))
    from_s, to_s, step_s = (_number(request, name) for name in SLICE)
    if step_s is not None and step_s <= 0:
        raise WrongValues("The query is wrong.", {"/step_s": "must be above 0"})
    kept = keeping.stores()
    reduction = _result(kept, flight, request)
    piece = series_piece(kept, reduction, part, from_s=from_s, to_s=to_s, step_s=step_s)
    answer = _as_csv(reduction, part, piece) if media_type == CSV else _as_json(reduction, part, piece, beside)
    answer.vary.add("Accept")
    answer.headers["Cache-Control"] = "private, no-cache"
    return answer


def _as_json(reduction: ReductionRecord, part: Group, piece: SeriesPart | None, beside: tuple[str, ...]) -> Response:
    summary = reduction.summary or {}
    columns = _dumped(part, piece) if piece is not None else {name: [] for name in SERIES_SCHEMAS[part]().fields}
    return json_answer(dump_part(reduction, {**columns, **{name: summary[name] for name in beside}}))


def _as_csv(reduction: ReductionRecord, part: Group, piece: SeriesPart | None) -> Response:
    remarks = [f"flight {reduction.flight_id}, reduction {reduction.number}, {part}"]
    if reduction.stale:
        remarks.append("stale: the aircraft's profile has changed since")
    text = csv_series(SERIES_SCHEMAS[part], piece and piece.columns, piece and piece.flags, remarks, cautions())
    return Response(text, mimetype=CSV)


def _dumped(part: Group, piece: SeriesPart) -> dict[str, Any]:
    dumped: dict[str, Any] = SERIES_SCHEMAS[part]().dump({**piece.columns, "flags": piece.flags})
    return dumped


def _result(kept: Stores, flight: str, request: Request) -> ReductionRecord:
    """The reduction whose result is asked for. Raises NotKept, NotReducedYet."""
    record = kept.flights.get(caller().owner, flight)
    reduction = shown_reduction(kept, record, _number_of_reduction(request))
    if reduction.state is JobState.DONE and reduction.summary is not None:
        return reduction
    if reduction.state in CLOSED:
        raise NotReducedYet(f"This reduction has no result: {reduction.failure}")
    raise NotReducedYet(f"The reduction is {reduction.state}.", {"Retry-After": "1"})


def _number_of_reduction(request: Request) -> int | None:
    text = request.args.get("reduction")
    if text is None:
        return None
    if not (text.isascii() and text.isdigit() and len(text) < 10 and int(text) >= 1):
        raise WrongValues("The query is wrong.", {"/reduction": "must be a whole number from 1"})
    return int(text)


def _number(request: Request, name: str) -> float | None:
    text = request.args.get(name)
    if text is None:
        return None
    try:
        number = float(text) if len(text) <= LONGEST_NUMBER and "_" not in text else math.nan
    except ValueError:
        number = math.nan
    if not math.isfinite(number):
        raise WrongValues("The query is wrong.", {f"/{name}": "must be a finite number [s]"})
    return number


def _media_type(request: Request) -> str:
    """JSON unless the client likes CSV better. Raises NothingAcceptable."""
    if request.headers.get("Accept") is None:
        return JSON
    best = request.accept_mimetypes.best_match([JSON, CSV])
    if best is None:
        raise NothingAcceptable(f"The answer is written as {JSON} or {CSV}, which the Accept header leaves out.")
    return best
