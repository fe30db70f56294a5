"""Gardens: small studies of any number of subjects and runs, for the page of a run.

Smooth noise in a made-up brain, an effect in Arbor and a weak one in Brook; regions by several
plans, with biased twins, a score, two groups, and declared variants.
"""

from __future__ import annotations

from pathlib import Path

import numpy as np
from planting import a_grid
from scipy.ndimage import gaussian_filter
from sequester.nodes.images import Geometry, write_bytes, write_map

SHAPE, MM = (26, 31, 25), 6.0
FLIPS = 19  # of the garden that tests share

REGION = """
[[roi]]
name = "{name}{look}"
plan = "{plan}"
search = {{ centre = {centre}, radius = 24, origin = "a walk in the garden" }}
rule = {{ kind = "cluster", p = 0.01, min_size = 3 }}
on_empty = "strongest"
k = 10
{more}
"""
CENTRES = {"Arbor": [-36, 12, 21], "Brook": [36, -48, 15], "Cinder": [3, -66, 0]}


def geometry() -> Geometry:
    """A coarse grid that holds the demo's made-up brain."""
    affine = np.diag([MM] * 3 + [1.0])
    affine[:3, 3] = [-75.0, -105.0, -66.0]
    return a_grid(SHAPE, affine)


def plant(folder: Path, n: int, n_runs: int, flips: int = 499) -> Path:
    """A study of n subjects: smooth noise, an effect in Arbor and a weak one in Brook."""
    study = folder / "STUDY.toml"
    if study.is_file():
        return study
    (folder / "maps").mkdir(parents=True)
    index = np.moveaxis(np.indices(SHAPE), 0, -1)
    mm = index @ geometry().affine[:3, :3].T + geometry().affine[:3, 3]
    brain = np.square((mm - [0, -12, 6]) / [66, 84, 60]).sum(axis=-1) <= 1
    truth = sum(
        effect * (np.linalg.norm(mm - CENTRES[name], axis=-1) <= 12)
        for name, effect in (("Arbor", 1.0), ("Brook", 0.4))
    )
    rng, lines = np.random.default_rng(3), ["path\tsub\ttask\trun\tsuffix\tgroup\tskill"]
    for i in range(1, n + 1):
        sub = f"{i:0{len(str(n))}d}"
        own = 3 * gaussian_filter(rng.standard_normal(SHAPE, np.float32), 0.6)
        skill, group = rng.normal(50, 10), ("day", "night")[i % 2]
        for run in range(1, n_runs + 1):
            noise = 2 * gaussian_filter(rng.standard_normal(SHAPE, np.float32), 0.6)
            name = f"maps/sub-{sub}_run-{run}.nii.gz"
            data = np.where(brain, truth + own + noise, 0).astype(np.float32)
            write_map(folder / name, data, geometry())
            lines.append(f"{name}\t{sub}\tlanterns\t{run}\tbold\t{group}\t{skill:.1f}")
    write_bytes(folder / "table.tsv", ("\n".join(lines) + "\n").encode())
    text = '[study]\nname = "garden"\ntable = "table.tsv"\nseed = 5\n'
    for name, centre in CENTRES.items():
        given = {"name": name, "centre": centre}
        more = f"flips = {flips}\n"
        if name == "Brook" and n < 100:
            more += "sensitivity = { p = [0.05, 0.001], min_size = [1, 10] }\n"
        text += REGION.format(**given, look="", plan="leave-one-subject-out", more=more)
        text += REGION.format(**given, look="Look", plan="exploratory", more="")
    if n_runs > 1:
        runs = {"name": "Runs", "centre": CENTRES["Arbor"], "look": "", "more": ""}
        text += REGION.format(**runs, plan="leave-one-run-out").replace(
            'kind = "cluster", p = 0.01, min_size = 3', 'kind = "strongest", k = 12, map = "mean"'
        )
    skilled = {"name": "Skilled", "centre": CENTRES["Brook"], "look": "", "plan": "k-fold"}
    more = f'score = "skill"\nreliability = {{ values = 0.8, score = 0.7 }}\nflips = {flips}\n'
    text += REGION.format(**skilled, more=more)
    compare = '{ column = "group", first = "day", second = "night" }'
    groups = {**skilled, "name": "Groups"}
    more = f'compare = {compare}\nstratify = "group"\nflips = {flips}\n'
    text += REGION.format(**groups, more=more)
    write_bytes(study, text.encode())
    return study
