"""A large study from real .nii.gz files: is time linear in N, memory bounded, decoding most of it?

Usage: python tests/bench/large.py [--folder FOLDER] [--most 1000] [--json FILE]
A folder that is named keeps the made files for the next time.
"""

from __future__ import annotations

import argparse
import gzip
import json
import multiprocessing
import resource
import tempfile
import time
from collections.abc import Callable
from pathlib import Path
from typing import Any

import nibabel as nib
import numpy as np
import psutil
from data import SHAPE, brain, geometry
from scipy.ndimage import gaussian_filter
from sequester.nodes.folds import KFold, LeaveOneOut
from sequester.nodes.images import read_map, write_bytes, write_map
from sequester.nodes.interfaces import ChooseByFold, SubjectMaps
from sequester.nodes.masks import Threshold
from sequester.nodes.procedure import Procedure

TOUCHED_A_MAP = 10 * 2**20  # bytes: the written map in the page cache, its row of the stack, room
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


def touch_memory(n: int) -> None:
    """Use as much memory as a run of n maps will, and give it back.

    A virtual machine's first use of a page may take ten times as long as the next; without
    this, whoever writes the first files pays for it.
    """
    np.ones(min(n * TOUCHED_A_MAP, psutil.virtual_memory().available // 2), np.uint8)


def masks_of(paths: list[Path], scheme: str, folder: Path) -> dict[str, float]:
    """Decode, then every fold's mask; processor seconds of each and the peak of this process."""
    labels = [path.name[:5] for path in paths]
    start = time.process_time()
    for path in paths:
        read_map(path)
    decode = time.process_time() - start
    user = resource.getrusage(resource.RUSAGE_SELF).ru_utime
    times = []
    inputs: Any = [str(path) for path in paths]
    with tempfile.TemporaryDirectory(dir=folder) as work:
        for interface in (
            SubjectMaps(in_files=inputs, labels=labels),
            ChooseByFold(
                labels=labels,
                search_file=str(folder / "brain.nii.gz"),
                procedure=Procedure(Threshold(p=0.001), SCHEMES[scheme]),
            ),
        ):
            if times:
                interface.inputs.in_files = inputs
            start = time.process_time()
            made = interface.run(cwd=work).outputs
            times.append(time.process_time() - start)
            inputs = getattr(made, "out_files", inputs)
    used = resource.getrusage(resource.RUSAGE_SELF)
    return {
        "decode": decode,
        "maps": times[0],
        "masks": times[1],
        "user": used.ru_utime - user,  # without the system's share: its pages, its file cache
        "peak_mb": used.ru_maxrss / 1024,
    }


def alone(function: Callable[..., Any], *arguments: Any) -> Any:
    """In a process of its own, so that a peak is that of one measurement."""
    with multiprocessing.get_context("spawn").Pool(1) as pool:
        return pool.apply(function, arguments)


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
        paths = make(folder, chosen.most)
        few, found = chosen.most // 4, {}
        for scheme in SCHEMES:
            for n in (few, chosen.most):
                alone(touch_memory, n)
                row = alone(masks_of, paths[:n], scheme, folder)
                found[f"{scheme}, N = {n}"] = row
                total = row["maps"] + row["masks"]
                spent = "  ".join(f"{k} {row[k]:6.1f} s" for k in ("decode", "maps", "masks"))
                print(
                    f"{scheme:22} N = {n:5}  {spent}  peak {row['peak_mb']:6.0f} MB"
                    f"  of which one plain decode {row['decode'] / total:.0%}",
                    flush=True,
                )
            small, large = (found[f"{scheme}, N = {n}"] for n in (few, chosen.most))
            ratio = (large["maps"] + large["masks"]) / (small["maps"] + small["masks"])
            print(
                f"{scheme:22} {chosen.most} over {few}: {ratio:.2f} x (<= 4.6), of its own "
                f"time {large['user'] / small['user']:.2f} x, "
                f"peak {large['peak_mb']:.0f} MB (< 3000)"
            )
    chosen.json.write_text(json.dumps(found, indent=2) + "\n")


if __name__ == "__main__":
    main()
