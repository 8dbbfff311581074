"""Gate: both sides have the same labels, in as many pieces, with as many holes."""

from __future__ import annotations

from typing import Any

import numpy as np
from numpy.typing import NDArray
from scipy.ndimage import find_objects, label
from skimage.measure import euler_number

from volmap.certify.evidence import Evidence
from volmap.certify.judge import judged
from volmap.certify.table import Limit
from volmap.types.certificate import Gate
from volmap.types.volumes import LabelVolume


def topology(mask: NDArray[np.bool_]) -> tuple[int, int]:
    """6-connected pieces and Euler number (pieces - handles + cavities) of a voxel set."""
    pieces = int(label(mask)[1])
    return pieces, int(euler_number(np.pad(mask, 1), connectivity=1))  # type: ignore[no-untyped-call]


def _topologies(volume: LabelVolume) -> dict[int, dict[str, int]]:
    boxes = find_objects(np.asarray(volume.labels, np.int32))
    found = {}
    for value in volume.present:
        pieces, euler = topology(volume.labels[boxes[value - 1]] == value)
        found[value] = {"pieces": pieces, "euler": euler}
    return found


def labels_agree(evidence: Evidence, limit: Limit) -> Gate:
    """Compare label sets, pieces and Euler numbers of both segmentations."""
    source, target = _topologies(evidence.source), _topologies(evidence.target)
    lonely = sorted(set(source) ^ set(target))
    changed = [v for v in sorted(set(source) & set(target)) if source[v] != target[v]]
    value: dict[str, Any] = {
        "labels": len(lonely),
        "topology": len(changed),
        "source": {str(k): v for k, v in source.items()},
        "target": {str(k): v for k, v in target.items()},
    }
    parts = [f"{evidence.name_of(v)} is in {'source' if v in source else 'target'} only" for v in lonely]
    for v in changed:
        s, t = source[v], target[v]
        parts.append(
            f"{evidence.name_of(v)} has {s['pieces']} pieces and Euler number {s['euler']} in source, "
            f"{t['pieces']} and {t['euler']} in target"
        )
    sentence = (
        "; ".join(parts) + "."
        if parts
        else f"Every label agrees in pieces and Euler number ({len(source)} in all)."
    )
    counts = {"labels": len(lonely), "topology": len(changed)}
    return judged(limit, counts, value=value, sentence=sentence[0].upper() + sentence[1:])
