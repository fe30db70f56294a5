"""A whole parcellation at once: a map's mean in every parcel, and one family of t-tests.

Definitions
-----------
A label image gives each voxel the number of its parcel, 0 for none. A table of values has a row
per map (or per subject) and a column per parcel; NaN says that the row lacks the parcel. The
subjects who have a parcel are those its test is about; parcels that cannot be tested do not count
in the family over which Holm's adjustment is made.
"""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass

import numpy as np
import numpy.typing as npt
from scipy import stats

from .errors import InputError
from .groupmaps import Missing
from .roi import Interval, TTest, holm, small_sample_factor

Floats = npt.NDArray[np.floating]
Ints = npt.NDArray[np.integer]
Bools = npt.NDArray[np.bool_]

# Values that spread by less than this share of their mean differ by rounding only.
_FLAT = 1e-13


def label_means(
    values: Floats, parcel: Ints, sizes: Ints, present: Bools | None = None
) -> tuple[Floats, Floats]:
    """The mean in every parcel of one map, over the voxels that have data.

    Parameters
    ----------
    values : (n_voxels,) float
    parcel : (n_voxels,) int
        Which parcel a voxel is in, from 0.
    sizes : (n_parcels,) int
        Voxels in each parcel: how often `parcel` holds its number.
    present : (n_voxels,) bool, optional
        Where there is data; the default is everywhere.

    Returns
    -------
    means : (n_parcels,) float64
        Summed in float64; NaN for a parcel without data.
    coverage : (n_parcels,) float64
        The share of a parcel's voxels with data; 0 for a parcel without voxels.

    Examples
    --------
    >>> values, parcel = np.array([1.0, 3.0, 8.0, 5.0]), np.array([0, 0, 1, 0])
    >>> label_means(values, parcel, np.array([3, 1, 0]), np.array([True, True, True, False]))
    (array([ 2.,  8., nan]), array([0.66666667, 1.        , 0.        ]))
    """
    n, counts = len(sizes), sizes
    if present is not None and not present.all():
        # Few voxels lack data: these are counted, not those that have it.
        counts = sizes - np.bincount(parcel[~present], minlength=n)
        values = np.where(present, values, values.dtype.type(0))
    sums = np.bincount(parcel, values, minlength=n)
    means = np.divide(sums, counts, out=np.full(n, np.nan), where=counts > 0)
    return means, counts / np.maximum(sizes, 1)


class Parcellation:
    """A label image, prepared once: a further map costs one gather and its sums.

    Parameters
    ----------
    labels : (x, y, z) whole numbers, of integer or float type
        0, NaN and infinities are no parcel.
    where : str
        What an error calls the image.

    Attributes
    ----------
    numbers : (n_parcels,) int64
        The label numbers, ascending.
    sizes : (n_parcels,) int64
        Voxels in each parcel.

    Raises
    ------
    InputError
        For labels that are not whole, or too large to be told apart; for an image without any.

    Examples
    --------
    >>> atlas = Parcellation(np.array([[[0, 7, 7, 3]]]))
    >>> atlas.numbers.tolist(), atlas.sizes.tolist()
    ([3, 7], [1, 2])
    >>> atlas.means(np.array([[[9.0, 1.0, 2.0, 5.0]]]), Missing())
    (array([5. , 1.5]), array([1., 1.]))
    """

    def __init__(self, labels: npt.NDArray[np.number], where: str = "") -> None:
        flat = labels.ravel(order="F")  # as images lie in memory: no copy
        self._voxels = np.flatnonzero(np.isfinite(flat) & (flat != 0))
        found = flat[self._voxels]
        if not len(found):
            raise InputError("label image without labels", where=where, remedy="give another image")
        if found.dtype.kind == "f":
            broken = found[found != np.round(found)]
            if len(broken):
                raise InputError(
                    "not a label image",
                    where=where,
                    expected="whole numbers",
                    got=f"{len(broken)} voxels that are none, {broken[0]:g} among them",
                    remedy="give the label image itself, brought to this grid by nearest label",
                )
            # Beyond this, neighbouring whole numbers are one number in floating point.
            largest, limit = np.abs(found).max(), 2**24 if found.dtype == np.float32 else 2**53
            if largest >= limit:
                raise InputError(
                    "label numbers too large to be told apart",
                    where=where,
                    expected=f"below {limit}",
                    got=f"{largest:.0f}",
                    remedy="number the parcels from 1",
                )
        self.numbers, self._parcel = np.unique(found.astype(np.int64), return_inverse=True)
        self.sizes = np.bincount(self._parcel)

    def means(self, data: Floats, missing: Missing) -> tuple[Floats, Floats]:
        """Mean and coverage of each parcel, as `label_means`, of a map on the same grid."""
        values = data.ravel(order="F")[self._voxels]
        return label_means(values, self._parcel, self.sizes, missing.present(values))


def aligned(
    row: npt.NDArray[np.number], own: Ints, numbers: Ints, absent: float
) -> npt.NDArray[np.number]:
    """A row over an image's own label numbers (ascending) as one over `numbers`.

    Examples
    --------
    >>> aligned(np.array([0.5, 0.7]), np.array([3, 7]), np.array([7, 4, 3]), np.nan)
    array([0.7, nan, 0.5])
    """
    out = np.full(len(numbers), absent, row.dtype)
    at = np.minimum(np.searchsorted(own, numbers), len(own) - 1)
    has = own[at] == numbers
    out[has] = row[at[has]]
    return out


def person_means(values: Floats, labels: Sequence[str]) -> Floats:
    """The rows of each label averaged, parcel by parcel over those that have it.

    Parameters
    ----------
    values : (n_maps, n_parcels) float
        NaN where a map lacks the parcel.
    labels : sequence of str, one per map

    Returns
    -------
    (n_labels, n_parcels) float64
        By sorted label; NaN where all of a label's maps lack the parcel.

    Examples
    --------
    >>> person_means(np.array([[1.0, np.nan], [5.0, 2.0], [2.0, 4.0]]), ["b", "a", "b"])
    array([[5. , 2. ],
           [1.5, 4. ]])
    """
    rows_of: dict[str, list[int]] = {}
    for row, label in enumerate(labels):
        rows_of.setdefault(label, []).append(row)
    out = np.empty((len(rows_of), values.shape[1]))
    for person, label in enumerate(sorted(rows_of)):
        # In order of size, so that the order of the maps does not reach the last bit.
        mine = np.sort(np.ascontiguousarray(values[rows_of[label]].T, dtype=np.float64), axis=1)
        has = np.isfinite(mine)
        n = has.sum(axis=1)
        sums = np.where(has, mine, 0).sum(axis=1)
        out[person] = np.divide(sums, n, out=np.full(len(n), np.nan), where=n > 0)
    return out


@dataclass(frozen=True)
class ParcelTest:
    """One parcel of a family.

    Parameters
    ----------
    n : int
        Subjects who have the parcel.
    mean : float
        Over them; NaN when there are none.
    test : TTest or None
    p_holm : float or None
        Adjusted over all parcels tested.
    untested : str
        Why there is no test; "" when there is one.
    """

    n: int
    mean: float
    test: TTest | None
    p_holm: float | None
    untested: str


def family_t(values: Floats, level: float = 0.95) -> list[ParcelTest]:
    """Student's one-sample t-test against zero in every parcel, as one family.

    Parameters
    ----------
    values : (n_people, n_parcels) float
        NaN where a subject lacks the parcel.
    level : float
        Coverage of each interval, which is not adjusted for the family.

    Returns
    -------
    list of ParcelTest
        Two-sided p, and p adjusted by Holm's step-down method (Holm 1979, Scand J Stat 6:65-70).
        A parcel that fewer than two subjects have, or without spread, has no test.

    Examples
    --------
    >>> made = family_t(np.array([[1.0, 4.0, 1.0], [2.0, 4.0, 5.0], [3.0, 4.0, np.nan]]))
    >>> [(one.n, one.untested or round(one.p_holm, 4)) for one in made]
    [(3, 0.1484), (3, 'all its values are equal'), (2, 0.3743)]
    """
    # A parcel's values side by side: sums then do not depend on how many parcels there are.
    x = np.ascontiguousarray(values.T, dtype=np.float64)
    has = np.isfinite(x)
    n = has.sum(axis=1)
    means = np.where(has, x, 0).sum(axis=1) / np.where(n, n, np.nan)
    lowest = np.where(has, x, np.inf).min(axis=1, initial=np.inf)
    highest = np.where(has, x, -np.inf).max(axis=1, initial=-np.inf)
    flat = highest - lowest <= _FLAT * np.abs(means)
    (tested,) = np.nonzero((n >= 2) & ~flat)

    df, mean = n[tested] - 1, means[tested]
    off = np.where(has[tested], x[tested] - mean[:, None], 0)
    deviation, root = np.sqrt(np.square(off).sum(axis=1) / df), np.sqrt(n[tested])
    t = mean / (deviation / root)
    p = 2 * stats.t.sf(np.abs(t), df)
    half = stats.t.ppf((1 + level) / 2, df) * deviation / root
    dz = t / root
    p_holm = holm(p.tolist())

    made = [
        ParcelTest(
            int(n[i]),
            float(means[i]),
            None,
            None,
            "fewer than two subjects have it" if n[i] < 2 else "all its values are equal",
        )
        for i in range(len(x))
    ]
    said = "Student's t interval (near-normal values)"
    for k, i in enumerate(tested):
        test = TTest(
            float(mean[k]),
            float(t[k]),
            int(df[k]),
            float(p[k]),
            Interval(float(mean[k] - half[k]), float(mean[k] + half[k]), "exact", said),
            float(dz[k]),
            float(dz[k]) * small_sample_factor(int(df[k])),
        )
        made[i] = ParcelTest(int(n[i]), test.mean, test, p_holm[k], "")
    return made
