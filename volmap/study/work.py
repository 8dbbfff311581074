"""What a worker does for one job: files in, a map folder out, and a few plain values for the ledger."""

from __future__ import annotations

import time
from dataclasses import dataclass, field
from functools import singledispatch
from pathlib import Path
from typing import Any

import numpy as np

from volmap import pipeline
from volmap.io.json_documents import plain
from volmap.io.landmarks import read_landmarks
from volmap.io.reading import Reading
from volmap.mapfolder import CERTIFICATE, read_certificate
from volmap.pipeline.machine import peak_mb
from volmap.study.design import Visit
from volmap.study.plan import PairJob, ScanJob
from volmap.types import Certificate, InputError, LandmarkPairs, Table


@dataclass(frozen=True)
class Result:
    """How a job ended.

    Parameters
    ----------
    refused : str
        Why its data cannot be used, in one sentence; empty when it was done.
    verdict : str
        Of a map's certificate.
    told : dict
        Plain values for the ledger.
    seconds, peak_mb : float
    """

    refused: str = ""
    verdict: str = ""
    told: dict[str, Any] = field(default_factory=dict)
    seconds: float = 0.0
    peak_mb: float = 0.0


def perform(job: ScanJob | PairJob, folder: Path) -> Result:
    """Do one job; data that cannot be used are an answer, not an error.

    Parameters
    ----------
    job : Job
    folder : Path
        Of the study.
    """
    begin = time.perf_counter()
    try:
        told, refused = _done(job, folder), ""
    except InputError as fault:
        told, refused = {}, fault.sentence
    return Result(refused, told.get("verdict", ""), told, round(time.perf_counter() - begin, 3), peak_mb())


@singledispatch
def _done(job: Any, folder: Path) -> dict[str, Any]:
    raise TypeError(f"no work is known for {type(job).__name__}")


@_done.register
def _screened(job: ScanJob, folder: Path) -> dict[str, Any]:
    screened = pipeline.screen_files([job.visit.labels], Reading(names=job.names))
    if screened.refused:
        raise InputError(screened.refusals[0], refused=True)
    return screened.results[0].as_dict()


@_done.register
def _mapped(job: PairJob, folder: Path) -> dict[str, Any]:
    place = folder / job.output
    if not (place / CERTIFICATE).is_file():  # else it was finished by a run that could not say so any more
        place.parent.mkdir(parents=True, exist_ok=True)
        pipeline.use_threads(job.settings.threads)
        reading = Reading(names=job.names)
        source, target = job.source[1], job.target[1]
        pipeline.map_files(
            source.labels,
            target.labels,
            place,
            _map_job(job),
            source_reading=reading,
            target_reading=reading,
            pairs=landmark_pairs(source, target),
            source_image=source.image,
            target_image=target.image,
        )
    return certified(read_certificate(place)) | {
        "regions": _plain_table(pipeline.measure_folder(place).table)
    }


def _plain_table(table: Table) -> dict[str, Any]:
    """Columns with their values, as JSON can keep them."""
    columns = [
        {"name": c.name, "unit": c.unit, "meaning": c.meaning, "values": c.values} for c in table.columns
    ]
    return dict(plain({"columns": columns}))


def _map_job(job: PairJob) -> pipeline.MapJob:
    settings = job.settings
    return pipeline.MapJob(
        mesh=pipeline.MeshSettings(edge_mm=settings.edge_mm),
        map=pipeline.MapSettings(
            energy=settings.energy, uncertainty_mm=settings.uncertainty_mm, seed=settings.seed
        ),
        both_orders=not settings.one_order,
        gates=settings.gates,
    )


def landmark_pairs(source: Visit, target: Visit) -> LandmarkPairs | None:
    """Landmarks of one name in both visits; one that is a guide in both steers the map, the rest check it.

    Raises
    ------
    InputError
        A landmark file that cannot be read, or two files without a name in common.
    """
    if source.landmarks is None or target.landmarks is None:
        return None
    here, there = read_landmarks(source.landmarks), read_landmarks(target.landmarks)
    partner = {name: i for i, name in enumerate(there.names)}
    both = [(i, partner[name]) for i, name in enumerate(here.names) if name in partner]
    if not both:
        raise InputError(
            "no landmark has the same name in both visits",
            where=f"{source.landmarks.name} and {target.landmarks.name}",
            refused=True,
        )
    a, b = (np.array(side) for side in zip(*both, strict=True))
    roles = tuple("guide" if here.roles[i] == there.roles[j] == "guide" else "check" for i, j in both)
    return LandmarkPairs(tuple(here.names[i] for i in a), here.points[a], there.points[b], roles)


def certified(certificate: Certificate) -> dict[str, Any]:
    """What the ledger keeps of a certificate."""
    gates = {gate.name: {"value": gate.value, "verdict": gate.verdict} for gate in certificate.gates}
    return {
        "verdict": certificate.verdict,
        "gates": gates,
        "source": certificate.source.get("sha256", ""),
        "target": certificate.target.get("sha256", ""),
        "seconds": dict(certificate.seconds),
    }
