"""Group maps by a linear model: two groups, a score, covariates; for all folds in one pass.

Definitions
-----------
Over the rows of one side with data at a feature: X the design's columns, y the effects,
G = X'X, b = X'y, Q = y'y. With the factor G = L L' (Cholesky) and the contrast c,

    u = L^-1 b,   w = L^-1 c,   t = w'u sqrt((n - p) / ((Q - u'u) w'w))

which is the t of c'beta by ordinary least squares, residual variance pooled over the rows,
n - p degrees of freedom (Seber & Lee 2003, Linear Regression Analysis, chapters 3 and 4).

G, b and Q are sums over rows, so those of all folds come from running sums of both ends, as in
`groupmaps`: neither the map nor the design's row of anybody held out enters the arithmetic of
their fold. Every step is one operation on whole arrays, feature by feature the same, so that
no bit depends on the size of a block or on which other features lack data.

Covariates are centred on each selection side. That is done to the contrast and not to the
columns: an effect at the side's mean covariates is c + (c'a) m, m the means and a the columns
that add up to one.
"""

from __future__ import annotations

from collections.abc import Callable, Mapping, Sequence
from dataclasses import dataclass, field

import numpy as np
import numpy.typing as npt

from .errors import InputError
from .folds import Fold
from .groupmaps import Missing, check_stack, filled, fold_sums, without_each

Floats = npt.NDArray[np.floating]
Column = tuple[str, tuple[float, ...]]

# float64 numbers that the sums of a block may hold: bounds the memory, whatever the design.
_NUMBERS = 1 << 23
# A column of which less than this share is its own follows from the columns before it.
_RANK = 1e-9
# A sum of squares below this share of the whole is rounding.
_FLAT = 64 * np.finfo(float).eps


@dataclass(frozen=True)
class Design:
    """The columns of a linear model over the rows of a stack, and the contrast that is mapped.

    Rows are those of the effect maps. A paired comparison needs no design: map the differences
    of each subject's maps (`SubjectMaps` makes them) with the plain one-sample t.

    Parameters
    ----------
    columns : tuple of (name, values)
        One value per row.
    contrast : tuple of float
        One weight per column.
    centred : tuple of str
        Columns centred on the rows that choose; the others then add up to one in every row
        (an intercept, or one indicator per group).

    Raises
    ------
    InputError
        When columns, names and weights do not fit together, or a value is not finite.

    Examples
    --------
    >>> design = Design((("base", (1.0, 1.0, 1.0)), ("dose", (0.0, 1.0, 5.0))), (0.0, 1.0))
    >>> design.n_rows, design.n_columns
    (3, 2)
    """

    columns: tuple[Column, ...]
    contrast: tuple[float, ...]
    centred: tuple[str, ...] = field(default=())

    def __post_init__(self) -> None:
        names = [name for name, _ in self.columns]
        if not self.columns or len(set(names)) != len(names):
            raise InputError("a design needs columns with names of their own", got=str(names))
        lengths = {name: len(values) for name, values in self.columns}
        if len(set(lengths.values())) != 1:
            raise InputError("columns of a design differ in length", got=str(lengths))
        for name, values in self.columns:
            bad = [row for row, value in enumerate(values) if not np.isfinite(value)]
            if bad:
                raise InputError(
                    "a design's value is not a finite number",
                    where=f"column {name}, row {bad[0]}",
                    got=str(values[bad[0]]),
                    remedy="leave the row out: a score that is not known cannot enter the model",
                )
        if len(self.contrast) != len(names) or not any(self.contrast):
            raise InputError(
                "a contrast has one weight per column, and one that is not zero",
                expected=f"weights for {', '.join(names)}",
                got=str(self.contrast),
            )
        if not set(self.centred) <= set(names):
            raise InputError(
                "centred columns are columns", expected=str(names), got=str(self.centred)
            )
        if self.centred:
            rest = [values for name, values in self.columns if name not in self.centred]
            if not rest or not np.allclose(np.sum(rest, axis=0), 1):
                raise InputError(
                    "columns are centred beside a constant",
                    expected="the other columns add up to one in every row",
                    got=str([name for name in names if name not in self.centred]),
                    remedy="add an intercept (a column of ones)",
                )

    @property
    def n_rows(self) -> int:
        """How many rows the design has."""
        return len(self.columns[0][1])

    @property
    def n_columns(self) -> int:
        """How many columns the design has."""
        return len(self.columns)

    def taken(self, rows: Sequence[int]) -> Design:
        """The design of these rows, in this order.

        Examples
        --------
        >>> adjusted_mean({"age": [30, 40, 50]}).taken([2, 0]).columns[1]
        ('age', (50.0, 30.0))
        """
        columns = tuple((name, tuple(v[row] for row in rows)) for name, v in self.columns)
        return Design(columns, self.contrast, self.centred)

    def score_columns(self, labels: Sequence[str]) -> list[tuple[str, list[tuple[str, float]]]]:
        """The columns that differ between rows, with whose value is whose.

        Parameters
        ----------
        labels : sequence of str
            One per row.

        Examples
        --------
        >>> regression([3, 1, 2], name="age").score_columns(["a", "b", "c"])
        [('age', [('a', 3.0), ('b', 1.0), ('c', 2.0)])]
        """
        return [
            (name, list(zip(labels, values, strict=False)))
            for name, values in self.columns
            if len(set(values)) > 1
        ]

    def matrix(self) -> npt.NDArray[np.float64]:
        """(n_rows, n_columns) float64: the columns as given, not centred."""
        return np.array([values for _, values in self.columns], dtype=float).T

    def compared(self) -> tuple[str, str]:
        """The names of the two groups that the contrast compares: first minus second.

        Raises
        ------
        InputError
            When the contrast is not one column minus another.

        Examples
        --------
        >>> two_sample(["pond", "hill", "hill", "pond"], "hill", "pond").compared()
        ('hill', 'pond')
        """
        weights = {name: w for (name, _), w in zip(self.columns, self.contrast, strict=True) if w}
        if sorted(weights.values()) != [-1, 1]:
            raise InputError(
                "the design does not compare two groups",
                expected="a contrast of one column minus another (two_sample)",
                got=str(weights),
            )
        first, second = sorted(weights, key=lambda name: -weights[name])
        return first, second


def two_sample(
    groups: Sequence[str],
    first: str,
    second: str,
    covariates: Mapping[str, Sequence[float]] | None = None,
) -> Design:
    """The first group minus the second: one indicator per group, their variance pooled.

    Parameters
    ----------
    groups : sequence of str
        Per row: its group. Further groups take part in the pooled variance.
    first, second : str
    covariates : mapping of name to values, optional
        Nuisance columns, one value per row.

    Raises
    ------
    InputError
        When a group has no row.

    Examples
    --------
    >>> design = two_sample(["pond", "hill", "hill"], "hill", "pond")
    >>> design.columns
    (('hill', (0.0, 1.0, 1.0)), ('pond', (1.0, 0.0, 0.0)))
    >>> design.contrast
    (1.0, -1.0)
    """
    if first == second or not {first, second} <= set(groups):
        raise InputError(
            "two groups to compare",
            expected=f"two of {', '.join(sorted(set(groups)))}",
            got=f"{first}, {second}",
        )
    names = [first, second, *sorted(set(groups) - {first, second})]
    columns = tuple((name, tuple(float(group == name) for group in groups)) for name in names)
    return _with_nuisance(columns, (1.0, -1.0, *[0.0] * (len(names) - 2)), covariates)


def regression(
    scores: Sequence[float],
    covariates: Mapping[str, Sequence[float]] | None = None,
    name: str = "score",
) -> Design:
    """The slope on a score: an intercept, the score, and covariates as nuisance.

    Parameters
    ----------
    scores : sequence of float, one per row
    covariates : mapping of name to values, optional
    name : str
        What the score is called.

    Examples
    --------
    >>> regression([3, 1, 2]).columns
    (('intercept', (1.0, 1.0, 1.0)), ('score', (3.0, 1.0, 2.0)))
    """
    score = (name, tuple(map(float, scores)))
    return _with_nuisance((_intercept(scores), score), (0.0, 1.0), covariates, (name,))


def adjusted_mean(covariates: Mapping[str, Sequence[float]]) -> Design:
    """The mean at the covariates' own means over the rows that choose.

    Parameters
    ----------
    covariates : mapping of name to values, one per row

    Examples
    --------
    >>> design = adjusted_mean({"age": [30, 40, 50]})
    >>> design.contrast, design.centred
    ((1.0, 0.0), ('age',))
    """
    if not covariates:
        raise InputError("no covariates", remedy="the plain mean needs no design")
    return _with_nuisance((_intercept(next(iter(covariates.values()))),), (1.0,), covariates)


def _intercept(rows: Sequence[float]) -> Column:
    return "intercept", (1.0,) * len(rows)


def _with_nuisance(
    columns: tuple[Column, ...],
    contrast: tuple[float, ...],
    covariates: Mapping[str, Sequence[float]] | None,
    centred: tuple[str, ...] = (),
) -> Design:
    more = {name: tuple(map(float, values)) for name, values in (covariates or {}).items()}
    weights = (*contrast, *[0.0] * len(more))
    return Design((*columns, *more.items()), weights, (*centred, *more))


def design_maps(
    effects: Floats,
    folds: Sequence[Fold],
    design: Design,
    missing: Missing | None = None,
    kind: str = "t",
) -> Floats:
    """The map of a design's contrast over every fold's selection side, in one pass.

    Parameters
    ----------
    effects : (n_rows, n_features) float
        Effect maps; a feature's rows without data are left out of its model.
    folds : sequence of Fold
        Their held-out rows partition the rows.
    design : Design
        Over the same rows.
    missing : Missing, optional
    kind : {"t", "mean"}
        Student's t of the contrast, or the contrast itself.

    Returns
    -------
    (n_folds, n_features), in the dtype of `effects`; NaN where fewer rows have data than
    `missing` or the model asks for, or where they do not determine it (a group without data).

    Raises
    ------
    InputError
        When a selection side does not determine the model: names the fold and the column.

    Notes
    -----
    Digits are lost with the square of a column's mean over its spread (and of the effects'
    mean over their residual spread): give years since 2000, not years.

    Examples
    --------
    >>> from sequester.nodes.folds import LeaveOneOut
    >>> design = two_sample(list("ppphhh"), "h", "p")
    >>> effects = np.array([[1.0], [2.0], [3.0], [5.0], [6.0], [9.0]])
    >>> design_maps(effects, LeaveOneOut().folds(list("abcdef")), design).round(4).ravel().tolist()
    [2.6112, 2.7111, 3.2378, 4.0931, 3.0, 4.2]
    """
    check_stack(effects, folds)
    sides = [(f"fold {fold.name}", fold.selection) for fold in folds]

    def total(stack: Floats) -> Floats:
        return without_each(fold_sums(stack, folds))

    return _maps(effects, design, sides, total, missing or Missing(), kind)


def design_map(
    effects: Floats, design: Design, missing: Missing | None = None, kind: str = "t"
) -> Floats:
    """The map of a design's contrast over all rows: (n_features,); see `design_maps`.

    Examples
    --------
    >>> design = two_sample(list("ppphhh"), "h", "p")
    >>> effects = np.array([[1.0], [2.0], [3.0], [5.0], [6.0], [9.0]])
    >>> design_map(effects, design).round(4).tolist()
    [3.5]
    """
    rows = tuple(range(len(effects)))
    everyone = Fold("all", rows, ())
    check_stack(effects, [everyone])

    def total(stack: Floats) -> Floats:
        return fold_sums(stack, [everyone])

    made: Floats = _maps(effects, design, [("all rows", rows)], total, missing or Missing(), kind)[
        0
    ]
    return made


def _maps(
    effects: Floats,
    design: Design,
    sides: Sequence[tuple[str, tuple[int, ...]]],
    total: Callable[[Floats], Floats],
    missing: Missing,
    kind: str,
) -> Floats:
    """One map per side; `total` sums a stack over the rows of each."""
    if design.n_rows != len(effects):
        raise InputError(
            "the design and the maps do not pair up",
            expected=f"{len(effects)} rows, one per map",
            got=str(design.n_rows),
        )
    X = design.matrix()
    p = design.n_columns
    products = {(i, j): X[:, [i]] * X[:, [j]] for i in range(p) for j in range(i + 1)}
    _check_sides(design, sides, {key: total(xx) for key, xx in products.items()})
    contrast = _contrasts(design, X, sides)
    fewest = p if kind == "mean" else p + 1
    least = np.array([[max(missing.least(len(rows), kind), fewest)] for _, rows in sides])
    out = np.empty((len(sides), effects.shape[1]), effects.dtype)
    block = max(1, _NUMBERS // (len(effects) * (len(products) + 2 * p + 4)))
    for start in range(0, effects.shape[1], block):
        x, present = filled(effects[:, start : start + block], missing)
        y = x.astype(np.float64)
        here = np.ones((len(y), 1)) if present is None else present.astype(np.float64)
        n = total(here)
        with np.errstate(all="ignore"):  # what overflows keeps its feature out of every mask
            values = _contrast(
                {key: total(here * xx) for key, xx in products.items()},
                [total(y * X[:, [i]]) for i in range(p)],
                total(np.square(y)),
                contrast,
                n - p,
                kind,
            )
        out[:, start : start + block] = np.where(n < least, np.nan, values)
    return out


def _contrasts(
    design: Design, X: Floats, sides: Sequence[tuple[str, tuple[int, ...]]]
) -> npt.NDArray[np.float64]:
    """(n_sides, n_columns): the contrast at each side's means of the centred columns."""
    centred = np.array([name in design.centred for name, _ in design.columns])
    contrast = np.tile(np.array(design.contrast, dtype=float), (len(sides), 1))
    for k, (_, rows) in enumerate(sides):
        contrast[k, centred] += contrast[k, ~centred].sum() * X[list(rows)][:, centred].mean(axis=0)
    return contrast


Gram = dict[tuple[int, int], Floats]


def _factor(gram: Gram, p: int) -> Gram:
    """The Cholesky factor of G, lower triangle; NaN from the first column that is not its own."""
    L: Gram = {}
    for i in range(p):
        for j in range(i):
            L[i, j] = (gram[i, j] - sum(L[i, k] * L[j, k] for k in range(j))) / L[j, j]
        own = gram[i, i] - sum(np.square(L[i, k]) for k in range(i))
        L[i, i] = np.sqrt(np.where(own > _RANK * gram[i, i], own, np.nan))
    return L


def _contrast(
    gram: Gram, b: list[Floats], Q: Floats, contrast: Floats, df: Floats, kind: str
) -> Floats:
    """The contrast or its t from the sums of a model; NaN where they do not determine it."""
    p = len(b)
    L = _factor(gram, p)
    u: list[Floats] = []
    w: list[Floats] = []
    for i in range(p):
        u.append((b[i] - sum(L[i, k] * u[k] for k in range(i))) / L[i, i])
        w.append((contrast[:, [i]] - sum(L[i, k] * w[k] for k in range(i))) / L[i, i])
    estimate: Floats = np.asarray(sum(wi * ui for wi, ui in zip(w, u, strict=True)))
    if kind == "mean":
        return estimate
    variance = np.asarray(sum(np.square(wi) for wi in w))
    residual = Q - sum(np.square(ui) for ui in u)
    flat = residual <= _FLAT * Q
    t: Floats = estimate * np.sqrt(df / (np.where(flat, 0.0, residual) * variance))
    nothing = flat & (np.square(estimate) <= _FLAT * Q * variance)
    t[nothing | (np.isnan(t) & ~np.isnan(variance))] = 0
    return t


def _check_sides(design: Design, sides: Sequence[tuple[str, tuple[int, ...]]], gram: Gram) -> None:
    """Refuse a side whose rows, all with data, do not determine the model."""
    p = design.n_columns
    for where, rows in sides:
        if len(rows) <= p:
            raise InputError(
                "too few rows for the design",
                where=where,
                expected=f"more than {p} rows for {p} columns on the side that chooses",
                got=str(len(rows)),
                remedy="use fewer columns, or folds that hold out fewer",
            )
    with np.errstate(all="ignore"):
        L = _factor(gram, p)
    for k, (where, _) in enumerate(sides):
        lost = [i for i in range(p) if np.isnan(L[i, i][k, 0])]
        if lost:
            raise InputError(
                "the design is not of full rank",
                where=where,
                expected="columns of which none follows from the others in the rows that choose",
                got=f"column {design.columns[lost[0]][0]!r}, which does",
                remedy="leave the column out, use folds that keep every group on both sides, or "
                "subtract a constant from a column whose mean is far above its spread",
            )
