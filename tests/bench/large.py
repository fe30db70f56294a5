"""A large study from real .nii.gz files: is time linear in N, memory bounded, decoding most of it?

Usage: python tests/bench/large.py [--folder FOLDER] [--most 1000] [--turns 3] [--json FILE]
A folder that is named keeps the made files for the next time.

A virtual machine that has given free memory back to its host pays for each page that it uses
anew, two seconds a gigabyte; few maps may find enough pages that are still there where many do
not. So each node runs twice in a row: the first time on whatever memory there is, then on the
memory of the first. What depends on N is read off the second; both are shown.
"""

from __future__ import annotations

import argparse
import gzip
import json
import multiprocessing
import resource
import tempfile
import time
from collections.abc import Callable, Iterator
from pathlib import Path
from typing import Any

import nibabel as nib
import numpy as np
from data import SHAPE, brain, geometry
from scipy.ndimage import gaussian_filter
from sequester.nodes.folds import KFold, LeaveOneOut
from sequester.nodes.images import read_map, write_bytes, write_map
from sequester.nodes.interfaces import ChooseByFold, SubjectMaps
from sequester.nodes.masks import Threshold
from sequester.nodes.procedure import Procedure

SCHEMES = {"leave-one-subject-out": LeaveOneOut(), "5 folds": KFold(5)}


def make(folder: Path, most: int) -> list[Path]:
    """Maps mixed from smooth noise, each with weights of its own; quickly packed."""
    paths = [folder / f"{i:05d}.nii.gz" for i in range(most)]
    if all(path.is_file() for path in paths):
        return paths
    rng, inside = np.random.default_rng(4), brain()
    patterns = np.stack(
        [gaussian_filter(rng.standard_normal(SHAPE, np.float32), 1.3)[inside] for _ in range(24)]
    )
    write_map(folder / "brain.nii.gz", inside, geometry())
    for path in paths:
        volume = np.zeros(SHAPE, np.float32)
        volume[inside] = rng.standard_normal(24).astype(np.float32) @ patterns
        image = nib.Nifti1Image(volume, geometry().affine)
        write_bytes(path, gzip.compress(image.to_bytes(), compresslevel=1, mtime=0))
    return paths


def masks_of(paths: list[Path], scheme: str, folder: Path) -> dict[str, float]:
    """Every fold's mask, then one plain decode; processor seconds of each, and the peak."""
    labels = [path.name[:5] for path in paths]
    spent: dict[str, list[float]] = {}
    inputs: Any = [str(path) for path in paths]
    with tempfile.TemporaryDirectory(dir=folder) as work:
        for name, interface in (
            ("maps", SubjectMaps(in_files=inputs, labels=labels)),
            (
                "masks",
                ChooseByFold(
                    labels=labels,
                    search_file=str(folder / "brain.nii.gz"),
                    procedure=Procedure(Threshold(p=0.001), SCHEMES[scheme]),
                ),
            ),
        ):
            if name == "masks":
                interface.inputs.in_files = inputs
            for _ in range(2):
                start = time.process_time()
                made = interface.run(cwd=work).outputs
                spent.setdefault(name, []).append(time.process_time() - start)
            inputs = getattr(made, "out_files", inputs)
    start = time.process_time()
    for path in paths:
        read_map(path)
    peak = resource.getrusage(resource.RUSAGE_SELF).ru_maxrss / 1024
    (maps_first, maps), (masks_first, masks) = spent["maps"], spent["masks"]
    return {
        "maps": maps,
        "masks": masks,
        "again": maps + masks,
        "first": maps_first + masks_first,
        "decode": time.process_time() - start,
        "peak_mb": peak,
    }


def alone(function: Callable[..., Any], *arguments: Any) -> Any:
    """In a process of its own, so that a peak is that of one measurement."""
    with multiprocessing.get_context("spawn").Pool(1) as pool:
        return pool.apply(function, arguments)


def measured(paths: list[Path], few: int, folder: Path) -> Iterator[dict[str, Any]]:
    """One turn: each scheme with few maps and with all."""
    for scheme in SCHEMES:
        rows = []
        for n in (few, len(paths)):
            row = alone(masks_of, paths[:n], scheme, folder)
            spent = "  ".join(f"{k} {row[k]:5.1f} s" for k in ("first", "again", "maps", "masks"))
            print(
                f"{scheme:22} N = {n:5}  {spent}  peak {row['peak_mb']:5.0f} MB (< 3000)"
                f"  of which one plain decode {row['decode'] / row['again']:.0%}",
                flush=True,
            )
            rows.append({"scheme": scheme, "n": n, **row})
        first, again = (rows[1][k] / rows[0][k] for k in ("first", "again"))
        print(
            f"{scheme:22} {len(paths)} over {few}: again {again:.2f} x (<= 4.6), "
            f"first {first:.2f} x",
            flush=True,
        )
        yield from rows


def main() -> None:
    """Measure, print, write."""
    parser = argparse.ArgumentParser(description=__doc__.splitlines()[0])
    parser.add_argument("--folder", type=Path)
    parser.add_argument("--most", type=int, default=1000)
    parser.add_argument("--turns", type=int, default=3)
    parser.add_argument("--json", type=Path, default=Path("bench-results.json"), metavar="FILE")
    chosen = parser.parse_args()
    with tempfile.TemporaryDirectory() as passing:
        folder = chosen.folder or Path(passing)
        folder.mkdir(parents=True, exist_ok=True)
        paths = make(folder, chosen.most)
        found = [
            {"turn": turn, **row}
            for turn in range(chosen.turns)
            for row in measured(paths, chosen.most // 4, folder)
        ]
    chosen.json.write_text(json.dumps(found, indent=2) + "\n")


if __name__ == "__main__":
    main()
