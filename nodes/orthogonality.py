"""When may a region be chosen by one contrast and tested by another on the same data?

When the errors of the two estimates are uncorrelated, at every level at which they vary. With a
design X (time points x regressors), noise covariance V, between-subject covariance B of the
regressors' effects, and contrasts a (chooses) and b (is tested), the covariance of the two is

    within a run, white noise          a' (X'X)^-1 b
    coloured noise, generalised LS     a' (X' V^-1 X)^-1 b
    coloured noise, ordinary LS        a' (X'X)^-1 X'VX (X'X)^-1 b
    between subjects                   a' B b

and it must vanish in the run and between subjects (Kriegeskorte et al. 2009, Nat Neurosci
12:535-540, for the run; the subjects are what is forgotten). Vectors a and b that are orthogonal
to each other are not enough. Between subjects too: a pooled mean (weights 1/N) and a group
difference or a slope (weights w) are correlated by sum(w_i v_i) / N, v_i the variances, which
vanishes for equal variances only.

Uncorrelated is independent for normal errors, and the certificate says that it assumes them.
"""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass

import numpy as np
import numpy.typing as npt

from .errors import InputError

Floats = npt.NDArray[np.floating]

# A correlation below this is rounding.
TOLERANCE = 1e-6
# A variance below this share of its parts' is rounding.
_NO_VARIANCE = 1e-12


@dataclass(frozen=True)
class Condition:
    """One condition of a certificate.

    Parameters
    ----------
    level : str
        Where the two estimates vary: "run" or "subject", and of what.
    correlation : float
        Of their errors there.
    """

    level: str
    correlation: float

    @property
    def holds(self) -> bool:
        """Whether the correlation is zero, up to rounding."""
        return abs(self.correlation) < TOLERANCE


@dataclass(frozen=True)
class Certificate:
    """Whether a contrast may be tested where another one of the same data chose.

    Parameters
    ----------
    chosen, tested : str
        The two contrasts in words.
    conditions : tuple of Condition
        It holds when all of them do, and one of them is between subjects.
    assumptions : tuple of str
        What was taken for granted, in words.

    Examples
    --------
    >>> made = Certificate("a + b", "a - b", (Condition("run", 0.0), Condition("subject", 0.2)), ())
    >>> made.holds, made.describe()
    (False, 'a + b and a - b: correlation of the errors 0 (run), 0.2 (subject)')
    """

    chosen: str
    tested: str
    conditions: tuple[Condition, ...]
    assumptions: tuple[str, ...]

    @property
    def holds(self) -> bool:
        """Whether every condition holds, and one of them is between subjects."""
        between = any(one.level.startswith("subject") for one in self.conditions)
        return between and all(one.holds for one in self.conditions)

    def describe(self) -> str:
        """The correlations in words."""
        told = ", ".join(f"{one.correlation:.3g} ({one.level})" for one in self.conditions)
        return f"{self.chosen} and {self.tested}: correlation of the errors {told}"


def error_covariance(
    design: npt.ArrayLike, noise: npt.ArrayLike | None = None, *, ordinary: bool = False
) -> Floats:
    """The covariance of the regressors' estimates, up to the noise variance.

    Parameters
    ----------
    design : (n_points, n_regressors) float
    noise : (n_points, n_points) float, optional
        Covariance of the noise; default white.
    ordinary : bool
        Fitted by ordinary least squares although the noise is coloured.

    Returns
    -------
    (n_regressors, n_regressors) float

    Raises
    ------
    InputError
        When the design is not of full rank.

    Examples
    --------
    >>> X = [[1, 0]] * 6 + [[0, 1]] * 3
    >>> cov = error_covariance(X)
    >>> float(round(np.array([1, 1]) @ cov @ [1, -1], 6))
    -0.166667
    """
    X = np.asarray(design, dtype=float)
    if X.ndim != 2 or np.linalg.matrix_rank(X) < X.shape[1]:
        raise InputError(
            "the design's columns follow from each other",
            expected="a design of full rank",
            got=f"rank {np.linalg.matrix_rank(X)} of {X.shape}",
            remedy="leave out a column that the others add up to",
        )
    inverse = np.linalg.inv(X.T @ X)
    made: Floats
    if noise is None:
        made = inverse
    elif ordinary:
        made = inverse @ X.T @ np.asarray(noise) @ X @ inverse
    else:
        made = np.linalg.inv(X.T @ np.linalg.solve(np.asarray(noise, dtype=float), X))
    return made


def correlation(covariance: npt.ArrayLike, a: npt.ArrayLike, b: npt.ArrayLike) -> float:
    """The correlation of two contrasts of estimates with a covariance.

    Parameters
    ----------
    covariance : (n, n) float
        Symmetric, without negative eigenvalues, in any unit.
    a, b : (n,) float

    Raises
    ------
    InputError
        Where a contrast has no weight or no variance: nothing can be shown about it then.

    Examples
    --------
    >>> float(round(correlation(np.diag([1 / 6, 1 / 3]), [1, 1], [1, -1]), 6))
    -0.333333
    """
    C = np.asarray(covariance, dtype=float)
    # Every regressor in its own standard deviation first: no unit is so small that it is lost.
    scaled = C / (np.abs(C).max() or 1)
    sd = np.sqrt(np.maximum(np.diag(scaled), 0))
    inside = np.where(sd > 0, sd, 1)
    R = scaled / inside[:, None] / inside
    one, other = (_in_deviations(np.asarray(x, dtype=float), sd) for x in (a, b))
    variances = [float(x @ R @ x) for x in (one, other)]
    if min(variances) < _NO_VARIANCE:
        raise InputError(
            "a contrast without variance",
            expected="two contrasts that vary, in the run and between subjects",
            got="weights and covariance that leave nothing of one of them",
            remedy="state the weights of both contrasts and a covariance that was measured",
        )
    return float(one @ R @ other) / float(np.sqrt(variances[0] * variances[1]))


def _in_deviations(weights: Floats, sd: Floats) -> Floats:
    """Weights of regressors in standard deviations; the largest is 1."""
    if not weights.any():
        raise InputError(
            "a contrast without weights",
            expected="a weight that is not zero",
            got=str(weights.tolist()),
            remedy="state the weights of both contrasts",
        )
    made: Floats = weights / np.abs(weights).max() * sd
    return made / (np.abs(made).max() or 1)


def autoregressive(n: int, rho: float) -> Floats:
    """(n, n) covariance of first-order autoregressive noise.

    Examples
    --------
    >>> autoregressive(3, 0.5).tolist()
    [[1.0, 0.5, 0.25], [0.5, 1.0, 0.5], [0.25, 0.5, 1.0]]
    """
    if not -1 < rho < 1:
        raise InputError("rho out of range", expected="-1 < rho < 1", got=f"{rho:g}")
    made: Floats = float(rho) ** np.abs(np.subtract.outer(np.arange(n), np.arange(n)))
    return made


def within_and_between(
    designs: Sequence[npt.ArrayLike],
    a: npt.ArrayLike,
    b: npt.ArrayLike,
    between: npt.ArrayLike,
    rho: float = 0.0,
    *,
    ordinary: bool = False,
) -> tuple[Condition, ...]:
    """The conditions for contrasts of the same runs of every subject.

    Parameters
    ----------
    designs : sequence of (n_points, n_regressors) float
        One per subject, or one for all.
    a, b : (n_regressors,) float
        What chooses and what is tested.
    between : (n_regressors, n_regressors) float
        Covariance of the regressors' true effects between subjects.
    rho : float
        Of first-order autoregressive noise.
    ordinary : bool
        Fitted by ordinary least squares.

    Returns
    -------
    tuple of Condition
        In the run (the worst of the subjects), and between subjects.

    Examples
    --------
    >>> X = [[1, 0]] * 6 + [[0, 1]] * 6
    >>> [one.holds for one in within_and_between([X], [1, 1], [1, -1], np.diag([1, 2]))]
    [True, False]
    """
    if not designs:
        raise InputError("no design", expected="one per subject, or one for all")
    worst = 0.0
    for design in designs:
        noise = autoregressive(len(np.asarray(design)), rho) if rho else None
        found = correlation(error_covariance(design, noise, ordinary=ordinary), a, b)
        worst = found if abs(found) > abs(worst) else worst
    fit = "ordinary" if ordinary or not rho else "generalised"
    kind = f"noise with rho = {rho:g}" if rho else "white noise"
    return (
        Condition(f"run: {kind}, {fit} least squares", worst),
        Condition("subject: between-subject covariance", correlation(between, a, b)),
    )


def mean_and_weights(weights: npt.ArrayLike, variances: npt.ArrayLike) -> Condition:
    """The condition for a region chosen by everybody's mean and tested by a weighted sum.

    Parameters
    ----------
    weights : (n_subjects,) float
        Of the test: a group difference (1/n in one, -1/m in the other) or a score's slope.
    variances : (n_subjects,) float
        Of each subject's effect.

    Examples
    --------
    >>> mean_and_weights([0.5, 0.5, -0.5, -0.5], [1, 1, 1, 1]).holds
    True
    >>> round(mean_and_weights([0.5, 0.5, -0.5, -0.5], [1, 1, 4, 4]).correlation, 6)
    -0.6
    """
    w, v = np.asarray(weights, dtype=float), np.asarray(variances, dtype=float)
    if abs(w.sum()) > 1e-9 * np.abs(w).sum():
        raise InputError(
            "weights that do not add up to zero",
            expected="a difference or a slope",
            got=f"sum {w.sum():g}",
        )
    if not (np.isfinite(v) & (v >= 0)).all():
        raise InputError("variances out of range", expected="0 or more", got=str(v.tolist()))
    pooled = np.full(len(w), 1 / len(w))
    return Condition("subject: variances", correlation(np.diag(v), pooled, w))
