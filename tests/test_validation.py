"""Every published or independently recomputed number beside what our functions give.

    python tests/test_validation.py        # writes docs/validation.md from the same list

Nothing here is copied from a result of ours: each line calls public functions.
"""

from __future__ import annotations

import importlib.util
import json
import sys
from collections.abc import Callable, Iterable
from dataclasses import dataclass
from decimal import Decimal
from fractions import Fraction
from functools import cache
from itertools import groupby
from pathlib import Path
from types import ModuleType
from typing import Any

import numpy as np
import numpy.typing as npt
import pytest
from scipy import optimize, stats
from scipy.ndimage import gaussian_filter
from sequester.nodes import exchange
from sequester.nodes.comparisons import Difference, group_interaction, repeated_measures
from sequester.nodes.design import Design, design_map, two_sample
from sequester.nodes.familywise import FlipPlan, benjamini_hochberg, bonferroni, max_t_extremes
from sequester.nodes.flips import all_signs
from sequester.nodes.foldnull import (
    dice,
    expected_dice,
    plain_t_false_positives,
    variance_inflation,
)
from sequester.nodes.groupmaps import Missing, group_map
from sequester.nodes.masks import Neighbourhood, Strongest, components
from sequester.nodes.models import Score
from sequester.nodes.orthogonality import autoregressive, correlation, error_covariance
from sequester.nodes.power import (
    Correlation,
    OneSample,
    Repeated,
    TwoSample,
    circular_inflation,
    dz_interval,
    effect_for,
    estimate_errors,
    n_for,
    selected_mean,
    smallest_r,
)
from sequester.nodes.procedure import Prepared, Procedure
from sequester.nodes.randomfield import (
    ClusterSizes,
    corrected_p,
    ec_densities,
    height_threshold,
    lattice,
    resels,
)
from sequester.nodes.reliability import ceiling, spearman_brown, split_half
from sequester.nodes.roi import TTest, holm, one_sample_t, sign_flip_t, small_sample_factor
from sequester.nodes.smoothness import fwhm_of_roughness, fwhm_of_stack
from sequester.nodes.space import Grid
from statsmodels.datasets import longley

HERE = Path(__file__).parent
PAGE = HERE.parent / "docs" / "validation.md"
CALIBRATION = HERE / "data" / "calibration.json"
GIVEN = json.loads((HERE / "data" / "checks.json").read_text(encoding="utf-8"))

Floats = npt.NDArray[np.floating]
Number = float | np.floating | np.bool_


@dataclass(frozen=True)
class Check:
    """One line of the page.

    Parameters
    ----------
    section, quantity : str
    ours : callable
        Gives a number, or several.
    expected : str
        As published, to its last digit; several separated by ", ".
    source : str
    within : float
        Relative, where the expected numbers are simulated.
    """

    section: str
    quantity: str
    ours: Callable[[], Number | Iterable[Number]]
    expected: str
    source: str
    within: float = 1e-6

    def outcome(self) -> tuple[str, bool]:
        """Ours to as many digits as are published, and whether all agree."""
        values, texts = np.atleast_1d(self.ours()).tolist(), self.expected.split(", ")
        pairs = list(zip(values, texts, strict=True))
        return ", ".join(_alike(*pair) for pair in pairs), all(
            abs(value - float(Fraction(text))) <= _tolerance(text, self.within)
            for value, text in pairs
        )


def _decimals(text: str) -> int:
    """How many digits after the point a printed number has, once written without exponent."""
    return max(0, -int(Decimal(text).as_tuple().exponent))


def _tolerance(text: str, within: float) -> float:
    """Half of the last printed digit, or a share of the number where that is more."""
    last = 0.0 if "/" in text or not _decimals(text) else 0.51 * 10.0 ** -_decimals(text)
    return max(1e-12, within * abs(float(Fraction(text))), last)


def _alike(value: float, text: str) -> str:
    """A value written as the text is: as many digits, the same denominator."""
    if "/" in text:
        below = text.split("/")[1]
        return f"{round(value * int(below), 6):g}/{below}"
    if "e" in text:
        digits = len(text.partition("e")[0].partition(".")[2])
        mantissa, exponent = f"{value:.{digits}e}".split("e")
        return f"{mantissa}e{int(exponent)}"
    # Without a sign where nothing but zeros is left.
    return f"{round(value, _decimals(text)) + 0.0:.{_decimals(text)}f}"


def lines(section: str, source: str, *rows: tuple[Any, ...]) -> list[Check]:
    """Checks of one source: (quantity, ours, expected), and how near where it was simulated."""
    return [Check(section, row[0], row[1], row[2], source, *row[3:]) for row in rows]


# -- what several lines share -----------------------------------------------------------------

SLEEP = np.array([GIVEN["sleep"]["g1"], GIVEN["sleep"]["g2"]], dtype=float)
MAIZE = np.array(GIVEN["darwin"]["x"], dtype=float)
FIFTEEN = np.array(GIVEN["bh1995"]["p"])
FOUR = np.array(GIVEN["maxT"]["X"], dtype=float)
FIVE = np.array(GIVEN["loso_tiny"]["X"])
TEN = np.array([1.2, 2.3, 2.9, 4.4, 4.6, 5.9, 7.4, 7.7, 8.1, 9.9])


def paired() -> TTest:
    return one_sample_t(SLEEP[1] - SLEEP[0])


def two_groups() -> float:
    """Student's t of the sleep data taken for two groups of ten."""
    design = two_sample(["one"] * 10 + ["two"] * 10, "two", "one")
    # One of the values is 0, and no missing one.
    return float(design_map(SLEEP.reshape(-1, 1), design, Missing(zeros=False))[0])


def welch() -> Difference:
    values = np.column_stack([np.r_[SLEEP[1], SLEEP[0]], np.zeros(20)])
    made = group_interaction(values, ["a", "none"], np.arange(20) < 10, ["two", "one"])
    return next(one for one in made.simple if one.what == "two minus one in a")


def two_sided(t: float, df: float) -> float:
    return float(2 * stats.t.sf(abs(t), df))


def correlated() -> tuple[float, float]:
    """r and its t, as of held-out values with a score."""
    people = list("abcdefghij")
    model = Score(tuple(zip(people, SLEEP[0].tolist(), strict=True))).comparison(people)
    return (
        model.estimate(SLEEP[1], model.observed()),
        model.statistic(SLEEP[1], model.observed()),
    )


def fisher() -> tuple[float, float]:
    interval = split_half(SLEEP.T, k=1).interval
    return interval.low, interval.high


def exaggeration(power: float) -> float:
    effect = optimize.brentq(lambda e: estimate_errors(e, 1).power - power, 1e-6, 9)
    return estimate_errors(effect, 1).type_m


def errors_of(effect: float, error: float) -> tuple[float, ...]:
    made = estimate_errors(effect, error)
    return made.power, made.type_s or 0.0, made.type_m


REGRESSIVE = autoregressive(4, 0.8)


def by_formula() -> float:
    """Power of repeated measures whose levels correlate less the farther they are apart."""
    centre = np.eye(4) - 1 / 4
    centred = centre @ REGRESSIVE @ centre
    epsilon = np.trace(centred) ** 2 / (3 * np.square(centred).sum())
    rho = (REGRESSIVE.sum() - 4) / 12
    return Repeated(4, float(rho), float(epsilon)).at(0.25, 20).power


@cache
def by_test(shape: tuple[int, ...]) -> float:
    """How often the corrected F of 20 people is significant at .05, with f = .25."""
    rng, means = np.random.default_rng(1), np.array(shape, float)
    means *= 0.25 / means.std()
    noise = rng.normal(size=(4000, 20, 4)) @ np.linalg.cholesky(REGRESSIVE).T
    return float(np.mean([repeated_measures(x, list("abcd")).p <= 0.05 for x in noise + means]))


def five() -> Prepared:
    """The feature with the largest mean of the other four subjects, held out in turn."""
    return Procedure(Strongest(1, "mean")).prepare(FIVE, list("abcde"), Grid((3, 1, 1), np.eye(4)))


@cache
def five_flipped() -> tuple[Floats, Floats]:
    """t and mean under all 32 flips, the first of which changes nothing."""
    signs = all_signs(5, 0, 32)
    made = [five().outcome(flip) for flip in signs]
    return np.array([one.t for one in made]), np.array([one.estimate for one in made])


def reached(values: Floats) -> float:
    """The share of flips with at least what the data have."""
    return float((values >= values[0] - 1e-9).mean())


def design(order: str) -> Floats:
    return np.array([[letter == "A", letter == "B"] for letter in order], float)


def sum_and_difference(
    order: str, noise: Floats | None = None, *, ordinary: bool = False
) -> tuple[float, float]:
    """Covariance and correlation of the errors of A + B and A - B."""
    covariance = error_covariance(design(order), noise, ordinary=ordinary)
    total, difference = np.array([1.0, 1.0]), np.array([1.0, -1.0])
    return (
        float(total @ covariance @ difference),
        correlation(covariance, total, difference),
    )


def shared_baseline() -> float:
    return correlation(error_covariance(np.repeat(np.eye(3), 2, axis=0)), [1, 0, -1], [0, 1, -1])


def box() -> Floats:
    """The resels of a box of ten each way."""
    return resels(lattice(Grid((21, 21, 21), np.eye(4))), np.full(3, 2.0))


CLUSTERS = ClusterSizes(50_000, (3.0, 3.0, 3.0), float(stats.norm.isf(0.001)))


def differences_read(fwhm: float) -> float:
    """What is found where first differences taken for derivatives read a FWHM."""
    return float(fwhm_of_roughness(4 * np.log(2) / fwhm**2))


def width(fwhm: float) -> float:
    """The FWHM found in white noise under a Gaussian kernel, its ends joined."""
    noise = np.random.default_rng(1).normal(size=(20, 32, 32, 32))
    smooth = gaussian_filter(noise, (0, *[fwhm / np.sqrt(8 * np.log(2))] * 3), mode="wrap")
    return float(fwhm_of_stack(smooth.reshape(20, -1), Grid((32, 32, 32), np.eye(4))).mean())


def sizes(connectivity: int) -> list[int]:
    """Of the components of five voxels, the largest first."""
    voxels = [(0, 0, 0), (0, 0, 1), (0, 1, 2), (1, 2, 3), (2, 2, 3)]
    grid = Grid((3, 3, 4), np.eye(4))
    features = np.sort(np.ravel_multi_index(np.transpose(voxels), grid.shape))
    pairs = Neighbourhood(grid, connectivity).pairs(features)
    _, _, cluster = components(np.ones((5, 1), bool), pairs)
    return sorted(np.bincount(cluster).tolist(), reverse=True)


def largest_t() -> list[float]:
    plan = FlipPlan(tuple("abcd"))
    extremes = max_t_extremes(FOUR, plan, two_sided=True)
    return [plan.p(t, extremes) for t in group_map(FOUR).tolist()]


def together() -> list[float]:
    """The same by the largest statistic of several tests under the same flips."""
    t = np.abs([group_map(flip[:, None] * FOUR) for flip in all_signs(4, 0, 16)])
    none = np.zeros(16)
    return exchange.max_statistic(
        [exchange.tested_by(float(one[0]), one, none, none, "all", exact=True) for one in t.T]
    )


def ten_points(rho: float = 0.0) -> tuple[list[float], list[float]]:
    """Estimates and standard errors of intercept and slope; generalised by whitening."""
    X = np.column_stack([np.ones(10), np.arange(10.0)])
    root = np.linalg.cholesky(autoregressive(10, rho))
    white, y = np.linalg.solve(root, X), np.linalg.solve(root, TEN)[:, None]
    estimates, errors = [], []
    for contrast in ((1.0, 0.0), (0.0, 1.0)):
        columns = (("intercept", tuple(white[:, 0])), ("time", tuple(white[:, 1])))
        model = Design(columns, contrast)
        estimates.append(float(design_map(y, model, kind="mean")[0]))
        errors.append(estimates[-1] / float(design_map(y, model)[0]))
    return estimates, errors


def employment() -> tuple[float, float]:
    """Longley's intercept and residual standard deviation, by centred columns."""
    data = longley.load_pandas()
    means = data.exog.mean()
    centred = data.exog - means
    columns = [("intercept", (1.0,) * len(centred))]
    columns += [(name, tuple(centred[name])) for name in centred]
    contrast = np.r_[1.0, -means]
    model = Design(tuple(columns), tuple(contrast))
    y = data.endog.to_numpy()[:, None] - data.endog.mean()
    above = float(design_map(y, model, kind="mean")[0])
    error = above / float(design_map(y, model)[0])
    unit = np.abs(model.matrix()).max(axis=0)
    scaled = contrast / unit
    share = scaled @ error_covariance(model.matrix() / unit) @ scaled
    return above + float(data.endog.mean()), error / float(np.sqrt(share))


def sets() -> tuple[npt.NDArray[np.bool_], npt.NDArray[np.bool_]]:
    return np.isin(range(6), [1, 2, 3, 4]), np.isin(range(6), [3, 4, 5])


# -- the lines --------------------------------------------------------------------------------

R_PY = "recomputed: R and Python"
PY = "recomputed: Python"
MEMORY = "from memory"
STUDENT = f"Student 1908, Biometrika 6:1-25; {R_PY}"
FISHER = f"Fisher 1935, Design of Experiments; {PY}, enumerated"
COHEN = f"Cohen 1988 ({MEMORY})"
OF_THE_PROJECT = f"formula of the project; {PY}, simulated too"
NIST = f"NIST reference data sets, Longley ({MEMORY}); data as in statsmodels"
ENUMERATED = f"{PY}, enumerated"

CHECKS = [
    *lines(
        "Tests and effect sizes",
        STUDENT,
        ("sleep data, paired: t", lambda: paired().t, "4.0621277"),
        ("its p", lambda: paired().p, "0.0028328902"),
        (
            "its 95 % interval",
            lambda: (paired().interval.low, paired().interval.high),
            "0.7001142, 2.4598858",
        ),
        ("two groups: Student's t(18), by the model of two groups", two_groups, "1.8608135"),
        ("p of that t", lambda: two_sided(two_groups(), 18), "0.0791867"),
        ("Welch: df", lambda: welch().df, "17.7764735"),
        ("Welch: p", lambda: welch().p, "0.0793941"),
        ("dz", lambda: paired().dz, "1.2845576"),
        (
            "its interval by noncentral t",
            lambda: dz_interval(paired().dz, 10),
            "0.4146278, 2.1180165",
        ),
        ("gz", lambda: paired().g, "1.1739249"),
        ("ds", lambda: welch().d, "0.8321811"),
        ("gs", lambda: welch().d * small_sample_factor(18), "0.7969352"),
        ("Pearson's r", lambda: correlated()[0], "0.7951702"),
        ("p of its t(8)", lambda: two_sided(correlated()[1], 8), "0.0059650"),
        ("its interval by Fisher", fisher, "0.3315255, 0.9494465"),
        (
            "sign-flip of the mean: one-sided, two-sided",
            lambda: (
                sign_flip_t(SLEEP[1] - SLEEP[0]),
                sign_flip_t(SLEEP[1] - SLEEP[0], sided=2),
            ),
            "2/1024, 4/1024",
        ),
    ),
    *lines(
        "Tests and effect sizes",
        f"Hedges 1981 ({MEMORY}); {R_PY}",
        (
            "J(9), J(18), J(19)",
            lambda: [small_sample_factor(df) for df in (9, 18, 19)],
            "0.9138748918, 0.9576464270, 0.9599103529",
        ),
    ),
    *lines(
        "Tests and effect sizes",
        FISHER,
        ("Darwin's maize: t", lambda: one_sample_t(MAIZE).t, "2.1479875"),
        ("its p", lambda: one_sample_t(MAIZE).p, "0.0497029"),
        ("flips with sum >= 314", lambda: sign_flip_t(MAIZE), "863/32768"),
        ("two-sided", lambda: sign_flip_t(MAIZE, sided=2), "0.0526733"),
    ),
    *lines(
        "Multiplicity",
        "Benjamini & Hochberg 1995, JRSS-B 57:289-300; recomputed: R and statsmodels",
        (
            "15 p-values at .05: found by Benjamini-Hochberg",
            lambda: np.sum(benjamini_hochberg(FIFTEEN) >= FIFTEEN),
            "4",
        ),
        ("by Bonferroni", lambda: np.sum(bonferroni(0.05, 15) >= FIFTEEN), "3"),
        ("by Holm", lambda: np.sum(np.array(holm(FIFTEEN.tolist())) <= 0.05), "3"),
        (
            "Holm's adjusted p, the first five",
            lambda: holm(FIFTEEN.tolist())[:5],
            "0.0015, 0.0056, 0.0247, 0.1140, 0.2211",
        ),
    ),
    *lines(
        "Power",
        f"{MEMORY}; its power is .7999995, that of ours .8",
        (
            "d that 10 subjects find, one-sample, power .80: about one sd",
            lambda: effect_for(OneSample(), 10, 0.8),
            "0.9960007",
        ),
    ),
    *lines(
        "Power",
        f"{MEMORY}; statsmodels agrees in tests/test_power.py",
        (
            "one-sample, d = .5: n = 20, n = 12",
            lambda: [OneSample().at(0.5, n).power for n in (20, 12)],
            "0.5645044, 0.3528241",
        ),
    ),
    *lines(
        "Power",
        f"{COHEN}, who prints 393, 64, 26",
        (
            "two-sample, power .80: n a group for d = .2, .5, .8",
            lambda: [n_for(TwoSample(), d, 0.8) for d in (0.2, 0.5, 0.8)],
            "393.4057, 63.76561, 25.52457",
        ),
    ),
    *lines(
        "Power",
        f"{MEMORY}; exact distribution of r",
        (
            "correlation: rho .5, n 29; rho .3, n 84",
            lambda: [Correlation().at(r, n).power for r, n in ((0.5, 29), (0.3, 84))],
            "0.81394, 0.80034",
        ),
    ),
    *lines(
        "Power",
        f"{COHEN}; simulated .727",
        (
            "repeated measures, f .25, N 20, 4 levels, rho .5",
            lambda: Repeated(4).at(0.25, 20).power,
            "0.7288426",
        ),
    ),
    *lines(
        "Power",
        "identity: the paired t at d = .5",
        ("2 levels, f .25, N 20", lambda: Repeated(2).at(0.25, 20).power, "0.5645044"),
    ),
    *lines(
        "Power",
        "below 1 the formula is approximate, and must say so",
        (
            "labelled approximate: epsilon .7, epsilon 1 (1 is yes)",
            lambda: [Repeated(4, epsilon=e).approximate for e in (0.7, 1.0)],
            "1, 0",
        ),
    ),
    *lines(
        "Power",
        "simulated for the project, inputs not kept: AR(.8) over 4 levels, f .25, N 20 gives them "
        "(epsilon .7245, mean correlation .699); 4,000 data sets, within 2.5 %",
        ("the formula with epsilon below 1", by_formula, "0.848"),
        (
            "the test itself, for means of the shape -1, 0, 0, 1 and 1, -3, 3, -1",
            lambda: [by_test(shape) for shape in ((-1, 0, 0, 1), (1, -3, 3, -1))],
            "0.823, 0.948",
            0.025,
        ),
    ),
    *(
        one
        for effect, error, expected, printed in (
            (0.1, 3.28, "0.0501065, 0.464423, 76.689", ".05, .46, 77"),
            (0.3, 3.28, "0.0509588, 0.394685, 25.587", ".05, .39, 25"),
            (1.0, 3.28, "0.0607147, 0.193712, 7.7492", ".06, .19, 7.8"),
        )
        for one in lines(
            "Winner's curse",
            "Gelman & Carlin 2014, Perspect Psychol Sci 9:641-651, print "
            f"{printed}; {PY}, simulated too",
            (
                f"effect {effect:g}, error {error:g}: power, type S, type M",
                lambda effect=effect, error=error: errors_of(effect, error),
                expected,
            ),
        )
    ),
    *lines(
        "Winner's curse",
        f"Button et al. 2013 have the shape ({MEMORY})",
        (
            "exaggeration at power .1, .2, .5, .8",
            lambda: [exaggeration(power) for power in (0.1, 0.2, 0.5, 0.8)],
            "3.71269, 2.25724, 1.40712, 1.12491",
        ),
    ),
    *lines(
        "Winner's curse",
        MEMORY,
        (
            "significant d over d: d .5, N 20, one-sample",
            lambda: OneSample().at(0.5, 20).type_m,
            "1.385216",
        ),
        (
            "h(u) at p .05, .01, .001",
            lambda: [selected_mean(p) for p in (0.05, 0.01, 0.001)],
            "2.0627128, 2.6652142, 3.3670901",
        ),
        ("smallest r with p < .001, n 20", lambda: smallest_r(20, 0.001), "0.6787811"),
    ),
    *lines(
        "Reliability",
        f"Spearman 1904 ({MEMORY}); Vul et al. 2009 print .74",
        ("ceiling of a correlation, .8 and .7", lambda: ceiling(0.8, 0.7), "0.7483315"),
    ),
    *lines(
        "Reliability",
        f"Spearman 1910, Brown 1910 ({MEMORY})",
        ("stepped up: .6 to twice the length", lambda: spearman_brown(0.6, 2), "0.75"),
        ("stepped down: .7 to half the length", lambda: spearman_brown(0.7, 0.5), "0.5384615"),
    ),
    *lines(
        "Circularity",
        f"five subjects, leave one out; {ENUMERATED}",
        (
            "feature chosen in each fold",
            lambda: [np.flatnonzero(mask)[0] for mask in five().masks()],
            "1, 0, 1, 1, 1",
        ),
        ("held-out values", lambda: five().outcome().values, "0.2, -0.1, 0.2, 0.8, 0.2"),
        (
            "mean, t",
            lambda: (five().outcome().estimate, five().outcome().t),
            "0.26, 1.7690759",
        ),
        (
            "p of t, the whole procedure flipped: one-sided",
            lambda: five().flip_test(31).p,
            "4/32",
        ),
        ("two-sided", lambda: reached(np.abs(five_flipped()[0])), "10/32"),
        (
            "p of the mean: one-sided, two-sided",
            lambda: (reached(five_flipped()[1]), reached(np.abs(five_flipped()[1]))),
            "10/32, 19/32",
        ),
        ("sum of the mean over all flips", lambda: np.sum(five_flipped()[1]), "0"),
        (
            "WRONG: the values flipped, the masks kept; one-sided",
            lambda: sign_flip_t(five().outcome().values),
            "2/32",
        ),
    ),
    *lines(
        "Circularity",
        OF_THE_PROJECT,
        *(
            (
                f"WRONG: plain t on held-out values, N {n}, {m} left out, p < {p:g}: variance "
                "inflation, false positives at .05",
                lambda n=n, m=m, p=p: (
                    variance_inflation(n, n // m, p),
                    plain_t_false_positives(n, n // m, p),
                ),
                f"{vif:.4f}, {rate:.4f}",
            )
            for n, m, p, vif, rate in GIVEN["vif"]
        ),
        (
            "WRONG: chosen and read on the same noise, N 20, p < .01: bias in sd",
            lambda: circular_inflation(0.01, 20),
            "0.596",
        ),
        (
            "Dice of two folds' masks by noise alone, N 20, p < .01, 1, 4, 10 left out",
            lambda: [expected_dice(20, k, 0.01) for k in (20, 5, 2)],
            "0.6617, 0.3171, 0.01",
        ),
    ),
    *lines(
        "Orthogonal contrasts",
        f"Kriegeskorte et al. 2009, Nat Neurosci 12:535-540 ({MEMORY})",
        ("A + B against A - B, n = (6, 6)", lambda: sum_and_difference("A" * 6 + "B" * 6)[0], "0"),
        (
            "n = (6, 3): covariance, correlation",
            lambda: sum_and_difference("A" * 6 + "B" * 3),
            "-1/6, -1/3",
        ),
        (
            "AABBBA, AR(.5), generalised least squares",
            lambda: sum_and_difference("AABBBA", autoregressive(6, 0.5))[0],
            "-6/47",
        ),
        (
            "the same, ordinary least squares",
            lambda: sum_and_difference("AABBBA", autoregressive(6, 0.5), ordinary=True)[0],
            "-0.1458333",
        ),
        (
            "WRONG for that noise: the check for white noise passes",
            lambda: sum_and_difference("AABBBA")[0],
            "0",
        ),
        ("shared baseline, two rows each: r", shared_baseline, "0.5"),
    ),
    *lines(
        "Smoothness and clusters",
        f"Worsley et al. 1996, HBM 4:58-73; {PY}",
        (
            "EC densities per resel, z = 3",
            lambda: ec_densities(3.0),
            "1.349898e-3, 2.943999e-3, 5.866941e-3, 1.039282e-2",
        ),
        (
            "t(19) = 4",
            lambda: ec_densities(4.0, 19),
            "3.830962e-4, 1.085008e-3, 2.845338e-3, 6.778555e-3",
        ),
        (
            "box of 10 x 10 x 10 resels, family-wise .05: z",
            lambda: height_threshold(box()),
            "4.667140",
        ),
        ("and back: corrected p of that z", lambda: corrected_p(4.667140, box()), "0.0500"),
    ),
    *lines(
        "Smoothness and clusters",
        f"Friston et al. 1994, HBM 1:210-220 ({MEMORY}); {PY}",
        (
            "u 3.0902323, 50,000 voxels, FWHM 3: E[m]",
            lambda: CLUSTERS.expected_clusters,
            "17.454266",
        ),
        (
            "E[N], voxels above u",
            lambda: CLUSTERS.expected_clusters * CLUSTERS.expected_size,
            "50.0000",
        ),
        ("E[n]", lambda: CLUSTERS.expected_size, "2.864629"),
        ("beta", lambda: CLUSTERS.beta, "0.5993933"),
        ("corrected p of 50 voxels", lambda: CLUSTERS.corrected_p(50), "0.0051027"),
    ),
    *lines(
        "Smoothness and clusters",
        "closed form: differences of one voxel taken for a derivative read too much",
        (
            "ours where these WRONGLY read 2.17557, 3.11624, 4.08695, 6.05785",
            lambda: [differences_read(w) for w in (2.17557, 3.11624, 4.08695, 6.05785)],
            "2.0000, 3.0000, 4.0000, 6.0000",
        ),
    ),
    *lines(
        "Smoothness and clusters",
        "simulated, another seed: within 2 %",
        (
            "FWHM read from noise under sampled kernels of 2, 3, 4, 6",
            lambda: [width(w) for w in (2, 3, 4, 6)],
            "2.024, 3.023, 4.001, 5.993",
            0.02,
        ),
    ),
    *lines(
        "Smoothness and clusters",
        "by hand: (0,0,0) (0,0,1) (0,1,2) (1,2,3) (2,2,3)",
        *(
            (f"sizes of components, connectivity {c}", lambda c=c: sizes(c), expected)
            for c, expected in ((6, "2, 2, 1"), (18, "3, 2"), (26, "5"))
        ),
    ),
    *lines(
        "Smoothness and clusters",
        f"[[1, 2], [2, -1], [3, 1], [4, 2]]; {ENUMERATED}",
        ("t of two features", lambda: group_map(FOUR), "3.8729833, 1.4142136"),
        ("family-wise p by max-T, two-sided", largest_t, "4/16, 8/16"),
        ("the same by the test of several regions", together, "4/16, 8/16"),
    ),
    *lines(
        "Linear models",
        "recomputed: R, and statsmodels the same",
        (
            "line through ten points: intercept, slope",
            lambda: ten_points()[0],
            "1.2618182, 0.9284848",
        ),
        ("standard errors", lambda: ten_points()[1], "0.2161605, 0.0404906"),
        (
            "generalised for AR(.4): intercept, slope",
            lambda: ten_points(0.4)[0],
            "1.2215604, 0.9403068",
        ),
        ("standard errors", lambda: ten_points(0.4)[1], "0.3736165, 0.0673275"),
    ),
    *lines(
        "Linear models",
        NIST,
        ("intercept", lambda: employment()[0], "-3482258.63460"),
        ("residual standard deviation", lambda: employment()[1], "304.85407356"),
    ),
    *lines(
        "Overlap",
        "by hand: {1, 2, 3, 4} and {3, 4, 5}",
        ("Dice", lambda: dice(*sets()), "4/7"),
        ("Jaccard, as Dice / (2 - Dice)", lambda: dice(*sets()) / (2 - dice(*sets())), "2/5"),
    ),
]

NOT_COMPUTED = (
    "The double-gamma response to an event (its values, peak, trough and integral) and the number "
    "of cosine drifts for a cutoff: models of single runs are fitted before sequester, which "
    "starts from effect maps. The lines under Linear models go through the code of group models, "
    "the generalised ones after whitening.",
)


# -- the page ---------------------------------------------------------------------------------


def _row(*cells: str) -> str:
    return f"| {' | '.join(cells)} |"


def _calibration() -> ModuleType:
    """tests/bench/calibration.py."""
    place = HERE / "bench" / "calibration.py"
    spec = importlib.util.spec_from_file_location("calibration", place)
    assert spec and spec.loader
    module = importlib.util.module_from_spec(spec)
    sys.modules["calibration"] = module
    try:
        spec.loader.exec_module(module)
    finally:
        del sys.modules["calibration"]
    return module


def page() -> str:
    """docs/validation.md."""
    parts = [
        "# Validation",
        "Every line is a test (`tests/test_validation.py`), and `python tests/test_validation.py` "
        "writes this page from the same list. Ours is computed by public functions when the page "
        "is written, and shown to as many digits as are expected. It agrees when it is within "
        "half of the last digit, or within 1e-6 of the number where that is more (or within what "
        "the source says, where it was simulated). Citations and published figures are from "
        "memory unless the source says how they were recomputed. WRONG marks a method that "
        "must not be used, and that gives what it is known to give.",
    ]
    for section, checks in groupby(CHECKS, lambda check: check.section):
        rows = [_row("quantity", "ours", "expected", "source", "agrees"), _row(*["---"] * 5)]
        for check in checks:
            ours, agrees = check.outcome()
            rows.append(
                _row(check.quantity, ours, check.expected, check.source, "yes" if agrees else "NO")
            )
        parts += [f"## {section}", "\n".join(rows)]
    if CALIBRATION.exists():
        results = json.loads(CALIBRATION.read_text(encoding="utf-8"))
        parts += [
            "## Calibration",
            "Simulated by `python tests/bench/calibration.py`; the numbers are in "
            "`tests/data/calibration.json`.",
            _calibration().table(results),
        ]
    parts += ["## Not computed", "\n".join(f"- {one}" for one in NOT_COMPUTED)]
    return "\n\n".join(parts) + "\n"


@pytest.mark.parametrize(
    "check", CHECKS, ids=[f"{check.section}-{check.quantity}" for check in CHECKS]
)
def test_ours_is_what_is_expected(check):
    ours, agrees = check.outcome()
    assert agrees, f"{check.quantity}: {ours}, expected {check.expected} ({check.source})"


def test_another_last_digit_does_not_agree():
    for ours, expected in ((4.0622, "4.0621"), (863 / 32768, "862/32768"), (4, "3"), (1e-9, "0")):
        assert not Check("", "", lambda ours=ours: ours, expected, "").outcome()[1]
    with pytest.raises(ValueError, match="shorter"):
        Check("", "", lambda: [1, 2], "1", "").outcome()


def test_the_page_shows_what_is_computed():
    assert PAGE.read_text(encoding="utf-8") == page()  # else run python tests/test_validation.py


if __name__ == "__main__":
    PAGE.write_text(page(), encoding="utf-8")
