"""Between objects and what the record keeps: JSON for words, npz for arrays. Never pickle."""

import io
import json
import math
from collections.abc import Iterable
from dataclasses import asdict
from datetime import datetime
from itertools import pairwise
from typing import Any

import numpy as np

from kinetics.remarks import Remark
from kinetics.signals.calibration import Calibration
from kinetics.signals.model import Integrals, Signal
from kinetics.signals.multiplet_model import LineModel
from kinetics.signals.response import Response
from kinetics.spectra.align import Template
from kinetics.spectra.matched import GroupShapes
from kinetics.spectra.model import ProcessingRecord, Stamp
from kinetics.spectra.processing import Shared


def pack(arrays: dict[str, Any]) -> bytes:
    """Write named arrays as npz bytes."""
    buffer = io.BytesIO()
    np.savez(buffer, allow_pickle=False, **arrays)
    return buffer.getvalue()


def unpack(data: bytes) -> dict[str, Any]:
    """Read what `pack` wrote."""
    with np.load(io.BytesIO(data), allow_pickle=False) as archive:
        return {name: archive[name] for name in archive.files}


def integrals_to_bytes(integrals: Integrals) -> bytes:
    """Write integrals as plain little-endian float64: k, then four arrays."""
    count = integrals.values.size
    return (
        np.concatenate(
            (
                [count],
                integrals.values,
                integrals.covariance.ravel(),
                integrals.offsets_ppm,
                integrals.heights,
            )
        )
        .astype("<f8")
        .tobytes()
    )


def integrals_from_bytes(data: bytes) -> Integrals:
    """Read what `integrals_to_bytes` wrote."""
    numbers = np.frombuffer(data, "<f8")
    k = int(numbers[0])
    ends = np.cumsum([1, k, k * k, k, k])
    parts = [numbers[a:b] for a, b in pairwise(ends)]
    return Integrals(parts[0], parts[1].reshape(k, k), parts[2], parts[3])


def calibration_to_bytes(calibration: Calibration) -> bytes:
    """Write a calibration."""
    shared, response = calibration.shared, calibration.response
    arrays: dict[str, Any] = {
        "version": calibration.version,
        "learned_from": np.array(calibration.learned_from, dtype=np.str_),
        "p1_deg": shared.p1_deg,
        "template_first": shared.template.first_ppm,
        "template": shared.template.profile,
        "occupied": np.array(shared.occupied, np.float64).reshape(-1, 2),
        "shift_ppm": shared.shift_ppm,
        "first_shift_ppm": calibration.first_shift_ppm,
        "line_width_hz": calibration.line_width_hz,
        "shape_step_ppm": calibration.shape_step_ppm,
        "mixing": response.mixing,
        "noise": response.noise,
        "local": np.array(response.local_baseline, bool),
        "line_width_ppm": response.line_width_ppm,
    }
    arrays["others"] = np.array([o.window for o in calibration.others], np.float64).reshape(-1, 2)
    arrays["groups_first"] = np.array(shared.groups.first_ppm, np.float64)
    arrays["groups_step"] = shared.groups.step_ppm
    if calibration.model is not None:
        model = calibration.model
        arrays["model_shape"] = model.shape
        arrays["model_line"] = np.array([model.step_ppm, model.width_ppm])
        arrays["model_places"] = model.places_ppm
        arrays["model_correlation"] = model.correlation
    for index, group in enumerate(shared.groups.shapes):
        arrays[f"group_{index}"] = group
    for index, shape in enumerate(calibration.shapes):
        arrays[f"shape_{index}"] = shape
    return pack(arrays)


def calibration_from_bytes(data: bytes) -> Calibration:
    """Read what `calibration_to_bytes` wrote."""
    a = unpack(data)
    shapes = tuple(a[f"shape_{i}"] for i in range(a["local"].size - len(a["others"])))
    return Calibration(
        version=int(a["version"]),
        learned_from=tuple(str(s) for s in a["learned_from"]),
        shared=Shared(
            float(a["p1_deg"]),
            Template(float(a["template_first"]), a["template"]),
            tuple((float(low), float(high)) for low, high in a["occupied"]),
            float(a["shift_ppm"]),
            GroupShapes(
                tuple(float(v) for v in a["groups_first"]),
                float(a["groups_step"]),
                tuple(a[f"group_{i}"] for i in range(a["groups_first"].size)),
            ),
        ),
        first_shift_ppm=float(a["first_shift_ppm"]),
        line_width_hz=float(a["line_width_hz"]),
        shapes=shapes,
        shape_step_ppm=float(a["shape_step_ppm"]),
        response=Response(
            a["mixing"],
            a["noise"],
            tuple(bool(v) for v in a["local"]),
            float(a["line_width_ppm"]),
        ),
        others=tuple(
            Signal("", (float(low), float(high)), 1.0, follow=False) for low, high in a["others"]
        ),
        model=_line_model(a) if "model_shape" in a else None,
    )


def _line_model(a: dict[str, Any]) -> LineModel:
    step, width = (float(v) for v in a["model_line"])
    return LineModel(a["model_shape"], step, width, a["model_places"], a["model_correlation"])


def remarks_to_json(remarks: Iterable[Remark]) -> str:
    """Write remarks."""
    return json.dumps([asdict(remark) for remark in remarks], ensure_ascii=False)


def remarks_from_json(text: str) -> tuple[Remark, ...]:
    """Read what `remarks_to_json` wrote."""
    return tuple(Remark(**entry) for entry in json.loads(text))


def stamp_to_json(stamp: Stamp) -> str:
    """Write a stamp."""
    entry = asdict(stamp)
    for key in ("start", "end", "modified"):
        entry[key] = None if entry[key] is None else entry[key].isoformat()
    return json.dumps(entry, ensure_ascii=False)


def stamp_from_json(text: str) -> Stamp:
    """Read what `stamp_to_json` wrote."""
    entry = json.loads(text)
    for key in ("start", "end", "modified"):
        entry[key] = None if entry[key] is None else datetime.fromisoformat(entry[key])
    return Stamp(**entry)


def processing_to_json(record: ProcessingRecord) -> str:
    """Write a processing record."""
    return json.dumps(asdict(record))


def processing_from_json(text: str) -> ProcessingRecord:
    """Read what `processing_to_json` wrote."""
    return ProcessingRecord(**json.loads(text))


def finite_or_none(value: float) -> float | None:
    """Return None for what a database or JSON cannot hold."""
    return value if math.isfinite(value) else None
