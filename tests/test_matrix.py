"""Every plan on 3-D files and 4-D stacks, on one grid and on each subject's own, with runs missing.

A real run of each combination must equal the plain re-implementation below, mask by mask and
value by value; the re-implementation then says over 200 data sets what is unbiased and by how
much the rest is off. tests/bench/matrix.py says the same with real runs alone.
"""

from functools import cache

import nibabel as nib
import numpy as np
import pytest
from click.testing import CliRunner
from scipy import ndimage, special, stats
from sequester import read_settings, run_study
from sequester.nodes.errors import InputError
from sequester.workflows.cli import main
from sequester.workflows.plans import PLANS as PLAN_WORDS
from worlds import (
    ATLAS,
    LAYOUTS,
    LOCALIZER,
    ONE,
    OWN,
    PATCH,
    PERSISTENT,
    PLANS,
    RUNS,
    SUBS,
    SUM,
    TESTED,
    THEMSELVES,
    WRONG,
    P,
    World,
    bank,
    bed,
    null_bias,
    offsets,
    read_results,
    study_toml,
    table,
)

# One file for the whole study needs one grid.
CELLS = [
    pytest.param(own, missing, layout, id=f"{'own' if own else 'one'}-{with_}-{layout}")
    for own in (False, True)
    for missing, with_ in ((False, "full"), (True, "missing"))
    for layout in LAYOUTS
    if not (own and layout == "stack of the study")
]
MANY = 200
TARGET = {plan.name: plan.target for plan in PLANS}
FLIPPED = ("Few", "Half", "Beds", "Each", "Apart")


# -- the same, plainly ----------------------------------------------------------------------------


@cache
def on_grid(sub):
    """A subject's sphere, patch and labels: on their own grid by looking at many points."""
    grid = OWN[sub] if sub else ONE
    shape, affine = grid
    sphere = np.linalg.norm(grid.mm() - [-6, 0, 0], axis=-1) <= 6 + 1e-6
    if not sub:
        return sphere, PATCH, ATLAS
    labels, covered = np.zeros(shape, int), np.zeros(shape)
    back, points = np.linalg.inv(ONE.affine), (np.arange(8) + 0.5) / 8 - 0.5
    for voxel in np.ndindex(shape):
        mm = affine @ [*voxel, 1]
        i, j, k = np.rint((back @ mm)[:3]).astype(int)
        if all(0 <= n < size for n, size in zip((i, j, k), ONE.shape, strict=True)):
            labels[voxel] = ATLAS[i, j, k]
        spread = np.stack(np.meshgrid(points, points, points), -1).reshape(-1, 3)
        inside = np.rint((spread @ affine[:3, :3].T + mm[:3]) @ back[:3, :3].T + back[:3, 3])
        held = ((inside >= 0) & (inside < ONE.shape)).all(axis=1)
        covered[voxel] = PATCH[tuple(inside[held].astype(int).T)].sum() / len(spread)
    return sphere, covered >= 0.5, labels


def t_map(maps):
    return stats.ttest_1samp(np.stack(maps).astype(float), 0, axis=0).statistic


def over(maps, where=True):
    """Where a one-sided t-test is significant."""
    t = t_map(maps)
    return (t > 0) & (stats.t.sf(t, len(maps) - 1) < P) & where


def strongest(values, k, where=None):
    where = np.ones(values.shape, bool) if where is None else where
    ranked = sorted(np.flatnonzero(where), key=lambda v: -values.flat[v])
    out = np.zeros(values.shape, bool)
    out.flat[ranked[:k]] = True
    return out


def largest(above):
    labels, n = ndimage.label(above, ndimage.generate_binary_structure(3, 2))
    return labels == 1 + np.argmax(np.bincount(labels.flat)[1:]) if n else above


def around_peak(t, grid):
    mm = grid.mm()
    return np.linalg.norm(mm - mm[np.unravel_index(np.argmax(t), t.shape)], axis=-1) <= 5 + 1e-6


def plainly(world, dealt):
    """Every value with its mask, as `worlds.read_results` reads them from a real run.

    `dealt` says for the plans that deal subjects into folds which fold each is in.
    """
    found = {}
    tested = {sub: world.mean(sub, TESTED) for sub in SUBS}
    other = {sub: world.mean(sub, LOCALIZER) for sub in SUBS}

    def put(roi, sub, mask, run="", parcel=""):
        of = world.maps[sub, TESTED, run] if run else tested[sub]
        value = float(of[mask].astype(float).mean()) if mask.any() else 0.0
        found[roi, parcel, sub, run] = value, mask

    for sub in SUBS:
        sphere, patch, labels = on_grid(sub if world.own else "")
        put("Ball", sub, sphere)
        put("Patch", sub, patch)
        put("Brook", sub, labels == 2)
        for number in (1, 2, 3):
            put("Parts", sub, labels == number, parcel=str(number))
        put("Own", sub, strongest(other[sub], 12))
        put("Near", sub, largest((other[sub] > 0.9) & ((labels == 1) | (labels == 2))))
        runs = world.runs(sub, TESTED)
        for position, run in enumerate(runs):
            rest = [world.maps[sub, TESTED, r] for r in runs if r != run]
            mask = strongest(np.mean(rest, axis=0, dtype=float), int(np.ceil(0.05 * labels.size)))
            put("Runs", sub, mask, run)
            half = [world.maps[sub, TESTED, r] for r in runs[(position + 1) % 2 :: 2]]
            put("Halves", sub, strongest(np.mean(half, axis=0, dtype=float), 8, labels == 3), run)
    if world.own:
        return found

    cinder = ATLAS == 3
    right = over([tested[s] for s in SUBS if bank(s) == "right"])
    same = over(list(other.values()), cinder)
    look = over(list(tested.values()), cinder)
    total = over([world.mean(sub, SUM) for sub in SUBS])
    choose = {
        "Few": lambda who: largest(over([tested[s] for s in who])),
        "Half": lambda who: around_peak(t_map([tested[s] for s in who]), ONE),
        "Beds": lambda who: strongest(t_map([tested[s] for s in who]), 30),
        "Each": lambda who: over([tested[s] for s in who]),
        "Apart": lambda who: strongest(t_map([other[s] for s in who]), 20),
    }
    folds = {**dealt, "Beds": {s: bed(s) for s in SUBS}}
    folds["Each"] = folds["Apart"] = {s: s for s in SUBS}
    for roi, rule in choose.items():
        for fold in sorted(set(folds[roi].values())):
            mask = rule([s for s in SUBS if folds[roi][s] != fold])
            for sub in (s for s in SUBS if folds[roi][s] == fold):
                put(roi, sub, mask)
    for sub in SUBS:
        put("Same", sub, same)
        put("Look", sub, look)
        put("Sum", sub, total)
        if bank(sub) == "left":
            put("Others", sub, right)
    return found


# -- a real run -----------------------------------------------------------------------------------


@pytest.mark.parametrize(("own", "missing", "layout"), CELLS)
def test_a_real_run_equals_the_plain_computation(tmp_path, own, missing, layout):
    world = World(1, own, missing)
    result = run_study(read_settings(world.write(tmp_path, layout)))
    read, shared = read_results(result.output)
    dealt = {roi: shared[roi] for roi in ("Few", "Half") if roi in shared}
    for roi, folds in dealt.items():
        sizes = np.unique(list(folds.values()), return_counts=True)[1]
        assert sorted(sizes) == {"Few": [3, 3, 4], "Half": [5, 5]}[roi]
    plain = plainly(world, dealt)
    assert read.keys() == plain.keys()
    for key, (value, mask) in plain.items():
        np.testing.assert_array_equal(read[key][1], mask, err_msg=str(key))
        np.testing.assert_allclose(read[key][0], value, rtol=1e-5, atol=1e-6, err_msg=str(key))
    for row in table(result.output / "roi_values.tsv"):
        affine = nib.load(result.output / "masks" / row["mask"]).affine
        np.testing.assert_allclose(affine, world.grids[row["sub"]].affine, atol=1e-5)
    # Far from trivial: no mask is everything, few are nothing.
    assert all(mask.sum() < mask.size / 2 for _, mask in plain.values())
    assert sum(mask.any() for _, mask in plain.values()) > 0.9 * len(plain)

    tests = {(row["roi"], row["parcel"]): row for row in table(result.output / "roi_tests.tsv")}
    for (roi, parcel), row in tests.items():
        mine = {}
        for (name, part, sub, _), (value, _) in plain.items():
            if (name, part) == (roi, parcel):
                mine.setdefault(sub, []).append(value)
        per_subject = [np.mean(values) for values in mine.values()]
        np.testing.assert_allclose(float(row["estimate"]), np.mean(per_subject), rtol=1e-5)
        assert row["biased"] == str(roi == "Look").lower()
        assert row["verdict"] == {"Look": "leak", "Sum": "certified"}.get(roi, "apart")
        if roi == "Look":
            assert not row["t"] and not row["p"] and not row["interval_low"]
            continue
        assert row["level"] == ("run" if TARGET[roi] == THEMSELVES else "subject")
        t = stats.ttest_1samp(per_subject, 0)
        np.testing.assert_allclose(float(row["t"]), t.statistic, rtol=1e-4)
        if roi in FLIPPED:
            assert row["n_flips"] == "9" and 0.1 <= float(row["p"]) <= 1
        else:
            ends = [float(row["interval_low"]), float(row["interval_high"])]
            np.testing.assert_allclose(ends, t.confidence_interval(), rtol=1e-3, atol=1e-5)
            np.testing.assert_allclose(float(row["p"]), t.pvalue, rtol=1e-3)


def test_every_plan_is_in_the_matrix():
    assert {plan.plan for plan in PLANS} == set(PLAN_WORDS)


@pytest.mark.parametrize("plan", [p for p in PLANS if p.group], ids=lambda p: f"{p.plan}-{p.name}")
def test_a_group_map_of_own_grids_is_refused_by_name(tmp_path, plan):
    World(1, own=True).write(tmp_path, "files")
    path = tmp_path / "STUDY.toml"
    path.write_text(study_toml([plan], own=True))
    with pytest.raises(InputError, match=f'grids = "own" does not go with plan {plan.plan!r}'):
        read_settings(path)
    said = CliRunner().invoke(main, ["run", str(path)])
    assert said.exit_code == 2
    assert plan.plan in said.output and not (tmp_path / "results").exists()


# -- over many data sets --------------------------------------------------------------------------


@pytest.fixture(scope="module", params=[(o, m) for o in (False, True) for m in (False, True)])
def many(request):
    """(own, missing) and the offset of each region in each data set."""
    own, missing = request.param
    dealt = {"Few": dict(zip(SUBS, "abcabcabca", strict=True))}
    dealt["Half"] = dict(zip(SUBS, "aabbaabbab", strict=True))
    made = []
    for seed in range(MANY):
        world = World(1000 + seed, own, missing)
        made.append(offsets(plainly(world, dealt), world))
    return own, missing, {key: np.array([one[key] for one in made]) for key in made[0]}


def error(x):
    """The Monte Carlo standard error of a mean."""
    return x.std(ddof=1) / np.sqrt(len(x))


def test_honest_plans_are_unbiased(many):
    own, _, of = many
    honest = {key: x for key, x in of.items() if (key[0], key[2]) not in WRONG}
    assert len(honest) == (10 if own else 18)
    for key, x in honest.items():
        assert abs(x.mean()) < 4 * error(x), f"{key}: {x.mean():.4f} +- {error(x):.4f}"
        assert error(x) < 0.01, "too few data sets to see much"


def test_what_is_circular_or_claims_too_much_is_off_as_predicted(many):
    own, missing, of = many
    off = {roi: of[roi, "", target] for roi, target in WRONG if (roi, "", target) in of}
    assert off.keys() == ({"Halves"} if own else {"Look", "Same", "Halves"})
    for x in off.values():
        assert x.mean() > 15 * error(x)
    predictions = {} if own else null_bias(missing)
    for roi, (predicted, uncertain) in predictions.items():
        x = off[roi]
        assert abs(x.mean() - predicted) < 4 * np.hypot(error(x), uncertain)


def test_the_prediction_is_the_formula():
    # The mean of n normal values is length x cosine / n standard errors of it, the length is
    # independent of t, and t = sqrt(n - 1) cosine / sine: so E[mean | t > c] is elementary.
    n, df = len(SUBS), len(SUBS) - 1
    c = stats.t.isf(P, df)
    by_t = stats.chi.mean(n) * (1 + c**2 / df) ** (-df / 2) / (df * special.beta(0.5, df / 2)) / P
    # Selected by a normal height u instead it would be phi(u) / p, and for few subjects it is
    # a little less.
    u = stats.norm.isf(P)
    assert 0.9 < by_t / (stats.norm.pdf(u) / P) < 1
    variance = PERSISTENT**2 + 1 / len(RUNS)
    reliability = PERSISTENT**2 / variance
    made = null_bias(missing=False)
    for roi, share in (("Look", 1), ("Same", reliability)):
        mean, uncertain = made[roi]
        assert abs(mean - share * by_t * np.sqrt(variance / n)) < 4 * uncertain
