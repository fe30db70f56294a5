"""A made-up study whose truth is known: what circular choice does to it, and what helps.

Scenario (invented): 24 visitors of a night garden watch lanterns drift, four rounds each, and
the effect of amber over teal lanterns is mapped. Two regions of the made-up brain respond,
Arbor strongly and Brook weakly; Cinder is noise and nothing else.
"""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass
from pathlib import Path

import numpy as np
import numpy.typing as npt
from scipy.ndimage import gaussian_filter

from ..nodes.errors import InputError
from ..nodes.images import Geometry, write_bytes, write_map
from ..nodes.space import Grid
from ..nodes.touch import Unit
from .study import Row, table_text

Floats = npt.NDArray[np.floating]
Bools = npt.NDArray[np.bool_]

N_SUBJECTS, N_RUNS, SEED = 24, 4, 7
SHAPE, VOXEL_MM, ORIGIN_MM = (52, 62, 50), 3.0, (-76.5, -105.0, -66.0)
CONTRAST = "amberMinusTeal"
# In units of the maps: sd of a subject's own map, and of one run's noise; smoothness in mm.
SUBJECT_SD, RUN_SD, FWHM_MM = 1.0, 1.2, 8.0
FLIPS = 1999


@dataclass(frozen=True)
class Place:
    """A region of the made-up brain: search ellipsoid, responding core, and true effect.

    Parameters
    ----------
    centre, search_mm, core_mm : (3,) float, mm
    effect : float
        In the core, in the units of the maps.
    """

    centre: tuple[float, float, float]
    search_mm: tuple[float, float, float]
    core_mm: tuple[float, float, float]
    effect: float


PLACES = {
    "Arbor": Place((-36.0, 12.0, 21.0), (21.0, 18.0, 18.0), (12.0, 9.0, 9.0), 1.0),
    "Brook": Place((36.0, -48.0, 15.0), (18.0, 21.0, 18.0), (9.0, 12.0, 9.0), 0.7),
    "Cinder": Place((3.0, -69.0, -12.0), (18.0, 18.0, 15.0), (0.0, 0.0, 0.0), 0.0),
}


def geometry() -> Geometry:
    """The demo's grid."""
    affine = np.diag([VOXEL_MM] * 3 + [1.0])
    affine[:3, 3] = ORIGIN_MM
    return Geometry(SHAPE, tuple(tuple(float(x) for x in row) for row in affine))


def _ellipsoid(centre: Sequence[float], radii: Sequence[float]) -> Bools:
    if not any(radii):
        return np.zeros(SHAPE, bool)
    grid = Grid(SHAPE, geometry().affine)
    scaled = (grid.coordinates() - np.asarray(centre)) / np.asarray(radii)
    inside: Bools = (np.square(scaled).sum(axis=1) <= 1).reshape(SHAPE)
    return inside


def brain() -> Bools:
    """A brain-like volume: two lobes and a smaller body below."""
    left = _ellipsoid((-30.0, -12.0, 12.0), (39.0, 81.0, 54.0))
    right = _ellipsoid((30.0, -12.0, 12.0), (39.0, 81.0, 54.0))
    below: Bools = _ellipsoid((0.0, -60.0, -30.0), (42.0, 30.0, 24.0))
    return left | right | below


def search_region(name: str) -> Bools:
    """The search region of a place, inside the brain."""
    place = PLACES[name]
    return _ellipsoid(place.centre, place.search_mm) & brain()


def true_effect() -> Floats:
    """The population's effect map that the generator adds noise to."""
    truth = np.zeros(SHAPE)
    for place in PLACES.values():
        truth[_ellipsoid(place.centre, place.core_mm)] = place.effect
    return truth


def _smooth_noise(rng: np.random.Generator, sd: float, shape: tuple[int, ...] = SHAPE) -> Floats:
    sigma = FWHM_MM / VOXEL_MM / np.sqrt(8 * np.log(2))
    # Summing the squared kernel gives the sd that smoothing leaves: (2 sigma sqrt(pi))^(-3/2).
    left = (2 * sigma * np.sqrt(np.pi)) ** -1.5
    white = rng.standard_normal(shape, dtype=np.float32)
    noise: Floats = gaussian_filter(white, sigma, mode="wrap") * np.float32(sd / left)
    return noise


def subject_runs(seed: int, subject: int) -> list[Floats]:
    """One subject's effect maps, one per run: truth + subject part + run part."""
    rng = np.random.default_rng([seed, subject])
    own = true_effect().astype(np.float32) + _smooth_noise(rng, SUBJECT_SD)
    inside = brain()
    return [np.where(inside, own + _smooth_noise(rng, RUN_SD), 0) for _ in range(N_RUNS)]


def region_effects(name: str, seed: int) -> tuple[Floats, Grid]:
    """Everybody's run average inside one search region, without the rest of the brain.

    For simulation over many seeds: the same distribution as the maps on disk (the average of
    four runs' noise is drawn at once), other numbers.

    Parameters
    ----------
    name : str
    seed : int

    Returns
    -------
    effects : (N_SUBJECTS, n_features) float32
    grid : Grid
        Of the search region.
    """
    inside = search_region(name)
    # A margin of one FWHM on each side, so that the wrapped edges of the noise stay outside.
    margin = int(np.ceil(FWHM_MM / VOXEL_MM))
    box = tuple(
        slice(max(0, int(where.min()) - margin), int(where.max()) + margin + 1)
        for where in np.nonzero(inside)
    )
    part = inside[box]
    truth = true_effect()[box][part].astype(np.float32)
    sd = float(np.sqrt(SUBJECT_SD**2 + RUN_SD**2 / N_RUNS))
    rng = np.random.default_rng([seed, len(name)])
    effects = [truth + _smooth_noise(rng, sd, part.shape)[part] for _ in range(N_SUBJECTS)]
    return np.stack(effects), Grid(SHAPE, geometry().affine, inside)


_LOOK = """
[[roi]]
name = "{name}{look}"
plan = "{plan}"{test}
search = {{ mask = "regions/{name}.nii.gz", origin = "{origin}" }}
rule = {{ kind = "cluster", p = 0.01, connectivity = 18, min_size = 5, pick = "largest" }}
on_empty = "strongest"
k = 20{flips}
"""
_ORIGIN = "drawn by the demo's generator from its plan of the made-up brain, before any noise"


def _settings(names: Sequence[str], output: str, *, circular: bool) -> str:
    head = (
        f'[study]\nname = "lanterns"\ntable = "table.tsv"\noutput = "{output}"\nseed = {SEED}\n'
        f'\n[data]\nselect = {{ contrast = "{CONTRAST}" }}\n'
    )
    parts = [head]
    for name in names:
        if circular:
            # Asking for a test of a circular region: the guard refuses.
            parts.append(
                _LOOK.format(
                    name=name,
                    look="",
                    plan="exploratory",
                    test='\ntest = "t"',
                    origin=_ORIGIN,
                    flips="",
                )
            )
        else:
            for look, plan in (("", "leave-one-subject-out"), ("Look", "exploratory")):
                flips = "" if look else f"\nflips = {FLIPS}"
                parts.append(
                    _LOOK.format(
                        name=name, look=look, plan=plan, test="", origin=_ORIGIN, flips=flips
                    )
                )
    return "".join(parts)


def write_demo(folder: Path, seed: int = SEED) -> tuple[Path, Path]:
    """Write the demo study: effect maps, regions, table, and two study files.

    Parameters
    ----------
    folder : Path
        New, or an earlier demo.
    seed : int

    Returns
    -------
    honest, circular : Path
        The two study files.

    Raises
    ------
    InputError
        When the folder holds something else.
    """
    ours = (folder / "table.tsv").is_file() and (folder / "circular.toml").is_file()
    if folder.exists() and not ours and (not folder.is_dir() or any(folder.iterdir())):
        raise InputError(
            "demo folder holds something else",
            where=str(folder),
            expected="a new folder, or an earlier demo",
            remedy="name another folder",
        )
    grid, rows = geometry(), []
    (folder / "regions").mkdir(parents=True, exist_ok=True)
    for name in PLACES:
        write_map(folder / "regions" / f"{name}.nii.gz", search_region(name), grid)
    for subject in range(1, N_SUBJECTS + 1):
        sub = f"{subject:02d}"
        place = folder / "maps" / f"sub-{sub}"
        place.mkdir(parents=True, exist_ok=True)
        for run, data in enumerate(subject_runs(seed, subject), 1):
            stem = f"sub-{sub}_task-lanterns_run-{run}_contrast-{CONTRAST}_stat-effect_statmap"
            path = write_map(place / f"{stem}.nii.gz", data.astype(np.float32), grid)
            unit = Unit(sub=sub, task="lanterns", run=str(run), suffix="bold")
            rows.append(Row(str(path.relative_to(folder.absolute())), None, unit, CONTRAST))
    write_bytes(folder / "table.tsv", table_text(rows).encode())
    honest, circular = folder / "STUDY.toml", folder / "circular.toml"
    write_bytes(honest, _settings(list(PLACES), "results", circular=False).encode())
    write_bytes(circular, _settings(["Cinder"], "circular", circular=True).encode())
    return honest, circular


def truth_in(masks: Sequence[Bools]) -> float:
    """The mean true effect over masks, the target of a held-out estimate."""
    truth = true_effect()
    return float(np.mean([truth[mask].mean() if mask.any() else 0.0 for mask in masks]))
