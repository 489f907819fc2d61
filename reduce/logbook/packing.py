"""Records to what a table holds, and back without loss."""

from __future__ import annotations

import json
import math
from collections.abc import Mapping
from dataclasses import asdict, fields, is_dataclass
from functools import lru_cache
from typing import Any, TypeVar

import numpy as np
from numpy.typing import NDArray

from reduce.plain_text import clean_text
from reduce.records import (
    STAR_DTYPE,
    ApparentModulus,
    BandMean,
    BudgetLine,
    Caution,
    Estimate,
    FieldSolution,
    FitCurve,
    FitPoint,
    FrameInfo,
    HubbleModulus,
    Measured,
    PeriodAlias,
    Posterior,
    Pulsation,
    Quality,
    SourceOffset,
)

R = TypeVar("R")


def plain(value: Any) -> Any:
    """Numbers, text, lists and mappings only; not-finite numbers become None."""
    if is_dataclass(value) and not isinstance(value, type):
        return plain(asdict(value))
    if isinstance(value, Mapping):
        return {str(key): plain(item) for key, item in value.items()}
    if isinstance(value, (list, tuple)):
        return [plain(item) for item in value]
    if isinstance(value, np.ndarray):
        return plain(value.tolist())
    if isinstance(value, np.generic):
        return plain(value.item())
    if isinstance(value, float):
        return value if math.isfinite(value) else None
    if value is None or isinstance(value, (str, int)):
        return value
    return clean_text(value)


def to_json(value: Any) -> str:
    """Compact JSON of a record; no NaN."""
    return json.dumps(plain(value), allow_nan=False, separators=(",", ":"), ensure_ascii=True)


def _tuples(value: Any) -> Any:
    return tuple(_tuples(item) for item in value) if isinstance(value, list) else value


def from_plain(record: type[R], data: Mapping[str, Any]) -> R:
    """A flat record from what `plain` made of it: lists become tuples, None in a float field becomes NaN.

    Fields that the record no longer has are dropped, new ones keep their default.
    """
    values: dict[str, Any] = {}
    for field in fields(record):  # type: ignore[arg-type]
        if field.name in data:
            value = _tuples(data[field.name])
            values[field.name] = math.nan if value is None and field.type == "float" else value
    return record(**values)


def optional(record: type[R], text: str | None) -> R | None:
    """The record of a JSON cell, None of an empty one."""
    return None if text is None else from_plain(record, json.loads(text))


def pack_stars(stars: NDArray[Any]) -> tuple[bytes, str]:
    """Rows as bytes, and the JSON description of one row.

    The names of targets take only the room they need. Not compressed: the numbers are mostly noise, zlib saves a
    quarter of the disk and makes reading twice as slow.
    """
    names: list[str] = stars["target"].tolist()
    width = max((len(name) for name in names), default=0) or 1
    packed = np.dtype([(d[0], f"<U{width}", *d[2:]) if d[0] == "target" else d for d in STAR_DTYPE.descr])
    return stars.astype(packed).tobytes(), json.dumps(packed.descr)


@lru_cache(maxsize=64)
def _row_type(description: str) -> np.dtype[Any]:
    items = json.loads(description)
    return np.dtype([(item[0], item[1], *(tuple(shape) for shape in item[2:])) for item in items])


def unpack_stars(block: bytes, description: str) -> NDArray[Any]:
    """Rows of STAR_DTYPE; of another description, the columns that both know, and zero in the others."""
    packed = np.frombuffer(block, _row_type(description))
    stars = np.zeros(len(packed), STAR_DTYPE)
    for name in packed.dtype.names or ():
        if name in STAR_DTYPE.fields:  # type: ignore[operator]
            stars[name] = packed[name]
    return stars


REDUCTION_COLUMNS = (
    "frame, recipe, outcome, reason, bjd_tdb, info, quality, solution, stars, stars_dtype, growth, seconds"
)


def measured_from_row(row: tuple[Any, ...]) -> Measured:
    """`Measured` from a row of REDUCTION_COLUMNS; the stamps stay in their file."""
    frame, recipe, outcome, reason, bjd_tdb, info, quality, solution, stars, dtype, growth, seconds = row
    growth_mag, growth_err_mag = (np.array(curve, dtype=np.float64) for curve in json.loads(growth))
    return Measured(
        frame=frame, recipe=recipe, outcome=outcome, reason=reason, bjd_tdb=bjd_tdb, seconds=seconds,
        info=optional(FrameInfo, info), quality=optional(Quality, quality),
        solution=optional(FieldSolution, solution),
        stars=unpack_stars(stars, dtype), growth_mag=growth_mag, growth_err_mag=growth_err_mag,
    )  # fmt: skip


def estimate_from_json(text: str) -> Estimate:
    """`Estimate` from its JSON, curves and points included."""
    data = json.loads(text)
    nested: dict[str, Any] = {
        "warnings": tuple(from_plain(Caution, item) for item in data["warnings"]),
        "budget": tuple(from_plain(BudgetLine, item) for item in data["budget"]),
        "points": tuple(from_plain(FitPoint, item) for item in data["points"]),
        "curves": tuple(
            FitCurve(item["band"], *(np.array(item[key], np.float64) for key in ("mjd", "mag", "sigma_mag")))
            for item in data["curves"]
        ),
    }
    nested["offsets"] = tuple(from_plain(SourceOffset, item) for item in data.get("offsets", ()))
    for key, record in (("posterior", Posterior), ("hubble", HubbleModulus)):
        nested[key] = from_plain(record, data[key]) if data.get(key) else None
    if data.get("pulsation") is not None:
        nested["pulsation"] = _pulsation(data["pulsation"])
    flat = {key: value for key, value in data.items() if key not in nested}
    return from_plain(Estimate, {**flat, **nested})


def _pulsation(data: Mapping[str, Any]) -> Pulsation:
    nested: dict[str, Any] = {
        "aliases": tuple(from_plain(PeriodAlias, item) for item in data["aliases"]),
        "means": tuple(from_plain(BandMean, item) for item in data["means"]),
        "moduli": tuple(from_plain(ApparentModulus, item) for item in data["moduli"]),
    }
    return from_plain(Pulsation, {**data, **nested})
