"""Turn a TopoJSON land file into ``coastline.npz``.

    python convert_coastline.py land-50m.json coastline.npz

The file beside this script was made so; ``PROVENANCE.txt`` says from what. Points are rounded to
hundredths of a degree and stored as differences along each line, which pack well. Edges that only
close polygons (along the date line, and along the pole under Antarctica) are left out.
"""

from __future__ import annotations

import json
import sys
from pathlib import Path

import numpy as np

STEPS_PER_DEGREE = 100


def read_arcs(topology: Path) -> list[np.ndarray]:
    """Return the arcs of a quantised TopoJSON file as (points, 2) longitudes and latitudes."""
    content = json.loads(topology.read_text(encoding="utf-8"))
    scale = np.array(content["transform"]["scale"])
    origin = np.array(content["transform"]["translate"])
    return [np.cumsum(np.array(arc), axis=0) * scale + origin for arc in content["arcs"]]


def split_arc(arc: np.ndarray) -> list[np.ndarray]:
    """Cut one arc where it follows the date line or the pole, or jumps round the globe."""
    on_date_line = np.abs(arc[:, 0]) > 179.99
    at_pole = arc[:, 1] < -89.9
    lines: list[list[np.ndarray]] = [[arc[0]]]
    for index in range(1, len(arc)):
        before, point = lines[-1][-1], arc[index]
        artefact = (on_date_line[index - 1] and on_date_line[index]) or (
            at_pole[index - 1] and at_pole[index]
        )
        if artefact:
            lines.append([point])
            continue
        turn = 360.0 * np.round((before[0] - point[0]) / 360.0)
        if turn:
            # One end of a jump always stands on the date line: finish the line there, on the
            # side it came from, and begin the next on the other side.
            lines[-1].append(point + np.array([turn, 0.0]))
            lines.append(
                [before - np.array([turn, 0.0]), point] if not on_date_line[index] else [point]
            )
        else:
            lines[-1].append(point)
    return [np.array(line) for line in lines if len(line) > 1]


def inside(line: np.ndarray) -> bool:
    """Tell whether a line stays within a hair of the plain window of longitudes."""
    return bool(np.all(np.abs(line[:, 0]) <= 180.001))


def convert(topology: Path, target: Path) -> None:
    """Write the lines of ``topology`` to ``target`` as counts and packed differences."""
    lines = [line for arc in read_arcs(topology) for line in split_arc(arc) if inside(line)]
    steps = [np.rint(line * STEPS_PER_DEGREE).astype(np.int64) for line in lines]
    steps = [line[np.r_[True, np.any(np.diff(line, axis=0) != 0, axis=1)]] for line in steps]
    steps = [line for line in steps if len(line) > 1]
    packed = np.concatenate([np.diff(line, axis=0, prepend=0) for line in steps])
    np.savez_compressed(
        target,
        counts=np.array([len(line) for line in steps], dtype=np.int32),
        differences=packed.astype(np.int16),
        steps_per_degree=np.int16(STEPS_PER_DEGREE),
    )


if __name__ == "__main__":
    convert(Path(sys.argv[1]), Path(sys.argv[2]))
