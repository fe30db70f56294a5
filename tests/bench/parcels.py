"""A parcellation of 400 parcels, read in N real .nii.gz maps: what does it cost beyond decoding?

Usage: python tests/bench/parcels.py [--folder FOLDER] [--most 1000] [--json FILE]
A folder that is named keeps the made files for the next time. Both are timed block by block in
turns, so that another program on the machine slows both.
"""

from __future__ import annotations

import argparse
import json
import tempfile
import time
from collections.abc import Callable
from functools import partial
from pathlib import Path

import numpy as np
from data import SHAPE, brain, geometry
from large import make
from scipy.spatial import KDTree
from sequester.nodes.images import read_map, write_map
from sequester.nodes.interfaces import ExtractParcels

N_PARCELS, BLOCK, BAR = 400, 100, 1.5


def make_atlas(folder: Path) -> Path:
    """Every voxel of the brain with the nearest of 400 of its voxels."""
    inside = brain()
    at = np.argwhere(inside)
    seeds = at[np.random.default_rng(9).choice(len(at), N_PARCELS, replace=False)]
    labels = np.zeros(SHAPE, np.int16)
    labels[inside] = 1 + KDTree(seeds).query(at)[1]
    return write_map(folder / "atlas.nii.gz", labels, geometry())


def decode(paths: list[Path]) -> None:
    """Each map as an array, and no more."""
    for path in paths:
        read_map(path)


def extract(paths: list[Path], atlas: Path) -> None:
    """The node, as it runs when it is cleared."""
    with tempfile.TemporaryDirectory() as work:
        ExtractParcels(
            label_files=str(atlas),
            in_files=[str(path) for path in paths],
            labels=[path.name for path in paths],
            clearance="a bench's",
        ).run(cwd=work)


def seconds(work: Callable[[list[Path]], None], paths: list[Path]) -> float:
    """How long it takes."""
    start = time.perf_counter()
    work(paths)
    return time.perf_counter() - start


def main() -> None:
    """Measure, print, write."""
    parser = argparse.ArgumentParser(description=__doc__.splitlines()[0])
    parser.add_argument("--folder", type=Path)
    parser.add_argument("--most", type=int, default=1000)
    parser.add_argument("--json", type=Path, default=Path("bench-results.json"), metavar="FILE")
    chosen = parser.parse_args()
    with tempfile.TemporaryDirectory() as passing:
        folder = chosen.folder or Path(passing)
        folder.mkdir(parents=True, exist_ok=True)
        paths, labels = make(folder, chosen.most), make_atlas(Path(passing))
        spent = {"decode": 0.0, "extract": 0.0}
        works = {"decode": decode, "extract": partial(extract, atlas=labels)}
        for start in range(0, len(paths), BLOCK):
            for what, work in works.items():
                spent[what] += seconds(work, paths[start : start + BLOCK])
            works = dict(reversed(works.items()))  # neither always finds the files read before
    ratio = spent["extract"] / spent["decode"]
    print(
        f"{N_PARCELS} parcels, N = {len(paths)}: decode {spent['decode']:.1f} s  "
        f"extract {spent['extract']:.1f} s  ratio {ratio:.2f} (<= {BAR})"
    )
    chosen.json.write_text(json.dumps({**spent, "ratio": ratio}, indent=2) + "\n")


if __name__ == "__main__":
    main()
