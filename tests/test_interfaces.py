"""Every interface, perturbed: what changes in an output must be in the touch of that output.

One element of one input is changed at a time, the interface runs again on real NIfTI files, and
the contents of its outputs (not their names) are compared element by element. The touches come
from the class's own rules, on trees in which every input element is a unit of its own.
"""

from __future__ import annotations

import hashlib
from collections.abc import Callable
from dataclasses import dataclass, field
from functools import cache
from pathlib import Path
from typing import Any

import numpy as np
import pytest
import sequester.nodes.interfaces as interfaces
from nipype.interfaces.base import isdefined
from planting import a_grid
from sequester.nodes.design import regression, two_sample
from sequester.nodes.errors import EmptyFoldError, InputError, Refused, SequesterError
from sequester.nodes.folds import KFold, LeaveOneOut
from sequester.nodes.groupmaps import Missing
from sequester.nodes.images import read_map, write_map
from sequester.nodes.interfaces.base import kept_error
from sequester.nodes.interfaces.generic import settings_of
from sequester.nodes.masks import Cluster, Strongest, Threshold
from sequester.nodes.models import Groups, Score
from sequester.nodes.procedure import Procedure
from sequester.nodes.rules import Branch, Inputs, Leaf, Tree, everything
from sequester.nodes.space import Grid
from sequester.nodes.subjects import Keep
from sequester.nodes.touch import Touch

GRID = a_grid((6, 6, 6))
PEOPLE = ("d", "a", "c", "b", "e")  # out of order: fold k is not row k


pytestmark = pytest.mark.usefixtures("quiet_engine")


def noise(seed: int) -> Any:
    """An effect map with some voxels outside the field of view."""
    rng = np.random.default_rng(seed)
    data = rng.normal(0.8, 1, GRID.shape).astype(np.float32)
    return np.where(rng.random(GRID.shape) < 0.05, np.float32(0), data)


def squared(seed: int) -> Any:
    """A variance map; a voxel outside the field of view has none."""
    return noise(seed) ** 2


def brightness(seed: int) -> Any:
    return 100 + noise(seed)


def t_map(seed: int) -> Any:
    return 4 * noise(seed)


def counts(seed: int) -> Any:
    """Seven maps with data at every voxel, or three."""
    return np.full(GRID.shape, 7.0 if seed < 1000 else 3.0)


def box(seed: int) -> Any:
    """A mask with a few voxels of its own."""
    return np.random.default_rng(seed).random(GRID.shape) < 0.3


def parcels(seed: int) -> Any:
    """A label image."""
    return np.random.default_rng(seed).integers(0, 5, GRID.shape).astype(np.int16)


def full_but_one(seed: int) -> Any:
    """A mask of the whole grid but for one voxel in the middle."""
    mask = np.ones(GRID.shape, bool)
    mask[2 + seed // 1000, 2, 2] = False
    return mask


def label_table(folder: Path, variant: int) -> str:
    """A table in which another label is called Arbor."""
    path = folder / f"labels{variant}.tsv"
    path.write_text(f"index\tname\n{1 + variant}\tArbor\n3\tBrook\n")
    return str(path)


def weight(seed: int) -> Any:
    """A mask whose values weigh."""
    return box(seed) * np.random.default_rng(seed + 1).random(GRID.shape)


@dataclass(frozen=True)
class Case:
    """An interface with inputs, and what may stand in for each element of each input.

    ``data`` holds inputs whose elements are perturbed; lists by element, others whole. An
    element is a function of (folder, variant) that writes a file or returns a value.
    ``choices`` holds parameters: two values each.
    """

    interface: type
    data: dict[str, Any]
    choices: dict[str, tuple[Any, Any]] = field(default_factory=dict)
    fixed: dict[str, Any] = field(default_factory=dict)


def image(make: Callable[[int], Any], number: int) -> Callable[[Path, int], str]:
    def write(folder: Path, variant: int) -> str:
        data = make(1000 * variant + number)
        return str(write_map(folder / f"{make.__name__}{number}-{variant}.nii", data, GRID))

    return write


def label_image(seed: int) -> Any:
    """A label image of parcels 2 to 4, or 1 to 3."""
    numbers = np.array((0, 2, 3, 4) if seed < 1000 else (0, 1, 2, 3), np.int16)
    return np.random.default_rng(seed).choice(numbers, GRID.shape)


def table(number: int) -> Callable[[Path, int], str]:
    """Five rows over two parcels, in (0, 1)."""

    def write(folder: Path, variant: int) -> str:
        path = folder / f"table{number}-{variant}.npy"
        np.save(path, np.random.default_rng(1000 * variant + number).random((5, 2)))
        return str(path)

    return write


def flipped(number: int) -> Callable[[Path, int], str]:
    """The values of five people as observed and under seven flips."""

    def write(folder: Path, variant: int) -> str:
        path = folder / f"flipped{number}-{variant}.npy"
        np.save(path, np.random.default_rng(1000 * variant + number).normal(1, 1, (8, 5)))
        return str(path)

    return write


def value(*variants: Any) -> Callable[[Path, int], Any]:
    return lambda _folder, variant: variants[variant]


def maps(n: int = 5) -> list[Any]:
    return [image(noise, i) for i in range(n)]


RECORD = "a record"  # stands for a file with one, made where a case is built
PROCEDURES = (Procedure(Threshold(p=0.05)), Procedure(Strongest(3)))
GROUPS = Groups(
    tuple(zip(PEOPLE, ("hill", "pond", "hill", "pond", "hill"), strict=True)), "hill", "pond"
)
SCORE = Score(tuple(zip(PEOPLE, (3.0, 1.0, 4.0, 1.5, 9.0), strict=True)))
NAMES = ("roi", "plan", "search")
CASES = {
    "SubjectMaps": Case(
        interfaces.SubjectMaps,
        {"in_files": [maps(2), [image(noise, 2), image(noise, 3)], [image(noise, 4)]]},
        {"missing": (Missing(zeros=True), Missing(zeros=False))},
        {"labels": ["a", "b", "c"]},
    ),
    "SubjectMaps, with all that is optional": Case(
        interfaces.SubjectMaps,
        {
            "in_files": [maps(2), [image(noise, 2), image(noise, 3)]],
            "variance_files": [[image(squared, i), image(squared, i + 1)] for i in (0, 2)],
            "minus_files": [[image(noise, 10), image(noise, 11)], image(noise, 12)],
            "minus_variance_files": [[image(squared, 10), image(squared, 11)], image(squared, 12)],
            "baseline_files": [image(brightness, 0), [image(brightness, 1), image(brightness, 2)]],
        },
        {"null_value": (0.0, 0.5)},
        {"labels": ["a", "b"]},
    ),
    "GroupMap": Case(
        interfaces.GroupMap,
        {"in_files": maps()},
        {"kind": ("t", "mean"), "missing": (Missing(), Missing(min_fraction=1.0))},
    ),
    "LeaveOutMaps": Case(
        interfaces.LeaveOutMaps,
        {"in_files": maps()},
        {"kind": ("t", "mean"), "scheme": (KFold(2), LeaveOneOut())},
        {"labels": list(PEOPLE)},
    ),
    "GroupMap by a design": Case(
        interfaces.GroupMap,
        {"in_files": maps()},
        {"design": (two_sample("ababa", "a", "b"), regression([1, 2, 3, 5, 8]))},
    ),
    "LeaveOutMaps by a design": Case(
        interfaces.LeaveOutMaps,
        {"in_files": maps(7)},
        {"design": (two_sample("abababa", "a", "b"), two_sample("abababb", "a", "b"))},
        {"labels": list("dacbegf")},
    ),
    "FoldLists": Case(
        interfaces.FoldLists,
        {"in_files": maps()},
        {"labels": (list(PEOPLE), list("xacbe")), "scheme": (KFold(2), LeaveOneOut())},
    ),
    "KeepSubjects": Case(
        interfaces.KeepSubjects,
        {
            "in_files": maps(),
            "measures": [lambda _, variant, i=i: 0.1 * i + 0.6 * variant for i in range(5)],
        },
        {"keep": (Keep(at_most=0.5), Keep(at_least=0.2))},
        {"labels": list(PEOPLE)},
    ),
    "MasksByRow": Case(
        interfaces.MasksByRow,
        {"mask_files": [image(box, i) for i in range(3)]},
        {"fold_of_row": ([1, 0, 2, 0, 1], [1, 0, 2, 0, 0])},
    ),
    "HeldOutSummary": Case(
        interfaces.HeldOutSummary,
        {
            "values": [value(0.5 + i, 9.0 + i) for i in range(4)],
            "coverage": [value(1.0, 0.25 + i / 8) for i in range(4)],
            "sizes": [value(7, 8) for _ in range(4)],
        },
        {
            "labels": (list("abcd"), list("abcc")),
            "n_folds": (4, 2),
            "rule": ("one rule", "another"),
            "names": (NAMES, ("other", *NAMES[1:])),
        },
    ),
    "HeldOutSummary of two groups": Case(
        interfaces.HeldOutSummary,
        {
            "values": [value(0.5 + i, 9.0 + i) for i in range(4)],
            "coverage": [value(1.0, 0.25 + i / 8) for i in range(4)],
            "sizes": [value(7, 8) for _ in range(4)],
        },
        {
            "groups": (list("abab"), list("abaa")),
            "compared": (("a", "b"), ("b", "a")),
        },
        {"labels": list("wxyz"), "n_folds": 4, "rule": "a rule", "names": NAMES},
    ),
    "ChooseMask": Case(
        interfaces.ChooseMask,
        {
            "in_file": image(t_map, 0),
            "search_file": image(box, 1),
            "count_file": image(counts, 2),
        },
        {
            "rule": (Threshold(p=0.05), Cluster(p=0.05)),
            "negative": (False, True),
        },
    ),
    "SphereMask": Case(
        interfaces.SphereMask,
        {"reference": image(noise, 0)},
        {"centre": ((6.0, 6.0, 6.0), (9.0, 6.0, 6.0)), "radius": (4.0, 7.0)},
        {"origin": "a paper"},
    ),
    "GivenMask": Case(
        interfaces.GivenMask, {"in_file": image(box, 0), "reference": image(noise, 1)}
    ),
    "LabelMask": Case(
        interfaces.LabelMask,
        {
            "in_file": image(parcels, 0),
            "table_file": label_table,
            "reference": image(noise, 1),
        },
        {"labels": (["Arbor", 4], ["Brook"])},
    ),
    "RegridLabels": Case(
        interfaces.RegridLabels, {"in_file": image(parcels, 0), "reference": image(noise, 1)}
    ),
    "CombineMasks": Case(
        interfaces.CombineMasks,
        {"in_files": [image(box, i) for i in range(3)]},
        {"how": ("union", "difference")},
    ),
    "ErodeMask": Case(
        interfaces.ErodeMask, {"in_file": image(full_but_one, 0)}, {"mm": (3.5, 5.0)}
    ),
    "MirrorMask": Case(
        interfaces.MirrorMask, {"in_file": image(box, 0)}, {"how": ("other", "both")}
    ),
    "ChooseByFold": Case(
        interfaces.ChooseByFold,
        {"in_files": maps(), "search_file": image(box, 9)},
        {"procedure": PROCEDURES},
        {"labels": list(PEOPLE)},
    ),
    "ChooseByFold, two groups": Case(
        interfaces.ChooseByFold,
        {"in_files": maps()},
        {
            "procedure": tuple(
                Procedure(rule, model=GROUPS) for rule in (Threshold(p=0.1), Strongest(3))
            )
        },
        {"labels": list(PEOPLE)},
    ),
    "ChooseWithin": Case(
        interfaces.ChooseWithin,
        {"in_files": maps(7), "search_files": [image(box, 9)]},
        {"procedure": PROCEDURES},
        # Two subjects with four and three runs, the rows interleaved and the runs out of order.
        {"labels": list("babbaab"), "runs": list("2314123")},
    ),
    "ChooseWithin, a search region each": Case(
        interfaces.ChooseWithin,
        {"in_files": maps(6), "search_files": [image(box, 9 + i) for i in range(6)]},
        fixed={"labels": list("babbaa"), "runs": list("231412"), "procedure": PROCEDURES[1]},
    ),
    "ChooseEach": Case(
        interfaces.ChooseEach,
        {"in_files": [image(t_map, i) for i in range(3)], "search_files": [image(box, 9)]},
        {"rule": (Threshold(height=4), Strongest(3)), "negative": (False, True)},
    ),
    "ChooseEach, a search region each": Case(
        interfaces.ChooseEach,
        {
            "in_files": [image(t_map, i) for i in range(3)],
            "search_files": [image(box, 9 + i) for i in range(3)],
        },
        fixed={"rule": Threshold(height=4)},
    ),
    "Extract": Case(
        interfaces.Extract,
        {"mask_files": [image(box, i) for i in range(5)], "in_files": maps()},
        {"missing": (Missing(zeros=True), Missing(zeros=False)), "summary": ("mean", "median")},
        {"labels": list(PEOPLE), "clearance": "a test's"},
    ),
    "Extract weighted": Case(
        interfaces.Extract,
        {"mask_files": [image(weight, i) for i in range(5)], "in_files": maps()},
        fixed={"labels": list(PEOPLE), "clearance": "a test's", "summary": "weighted"},
    ),
    "Extract a component": Case(
        interfaces.Extract,
        {"mask_files": [image(box, 0)], "in_files": maps()},
        # Two subjects with two maps, one with one.
        fixed={"labels": list("abacb"), "clearance": "a test's", "summary": "component"},
    ),
    "ExtractParcels": Case(
        interfaces.ExtractParcels,
        {"label_files": [image(label_image, i) for i in range(5)], "in_files": maps()},
        {
            "missing": (Missing(zeros=True), Missing(zeros=False)),
            "min_coverage": (0.0, 1.0),
        },
        {"labels": list(PEOPLE), "clearance": "a test's"},
    ),
    "ExtractParcels of some parcels": Case(
        interfaces.ExtractParcels,
        {"label_files": [image(label_image, 9)], "in_files": maps()},
        {"parcels": ([2, 3], [3, 4])},
        {"labels": list(PEOPLE), "clearance": "a test's"},
    ),
    "FlipTest": Case(
        interfaces.FlipTest,
        {"in_files": maps()},
        {"n_flips": (19, 7), "seed": (0, 1), "interval": ("flips", "jackknife")},
        {"labels": list(PEOPLE), "procedure": PROCEDURES[0], "names": NAMES, "keep_values": True},
    ),
    "FlipTest of a score": Case(
        interfaces.FlipTest,
        {"in_files": maps()},
        {"n_flips": (19, 7), "seed": (0, 1)},
        {
            "labels": list(PEOPLE),
            "procedure": Procedure(Strongest(3), model=SCORE),
            "names": NAMES,
            "keep_values": True,
        },
    ),
    "FlipTest on other maps": Case(
        interfaces.FlipTest,
        {"in_files": maps(), "tested_files": [image(noise, 50 + i) for i in range(5)]},
        fixed={
            "labels": list(PEOPLE),
            "procedure": Procedure(Strongest(3)),
            "names": NAMES,
            "n_flips": 19,
            "keep_values": True,
        },
    ),
    "CompareHeldOut": Case(
        interfaces.CompareHeldOut,
        {"values_files": [flipped(i) for i in range(2)]},
        {"kind": ("difference", "anova")},
        {"record_files": [RECORD, RECORD], "names": ["Arbor", "Brook"]},
    ),
    "CompareFixed": Case(
        interfaces.CompareFixed,
        {"values": [[value(0.5 + i * i + 2 * k, 9.0 + i) for i in range(4)] for k in range(2)]},
        {"kind": ("difference", "anova")},
        {"labels": list("abcd"), "row_labels": [list("abcd")] * 2, "names": ["Arbor", "Brook"]},
    ),
    "CompareFixed, whether alike": Case(
        interfaces.CompareFixed,
        {"values": [[value(0.5 + i * i, 9.0 + i) for i in range(4)]]},
        {"smallest": (1.0, 2.0)},
        {
            "kind": "equivalence",
            "labels": list("abcd"),
            "row_labels": [list("abcd")],
            "names": ["Arbor"],
        },
    ),
    "CompareFixed in two ways": Case(
        interfaces.CompareFixed,
        {"values": [[value(i * k + i + k + 0.5, 9.0 + i * i) for i in range(4)] for k in range(4)]},
        {"factors": ([["a", "b"], ["c", "d"]], [["a", "b"], ["c", "e"]])},
        {
            "kind": "interaction",
            "labels": list("abcd"),
            "row_labels": [list("abcd")] * 4,
            "names": ["Arbor", "Brook", "Cinder", "Dell"],
        },
    ),
    "FixedRegionTest": Case(
        interfaces.FixedRegionTest,
        {
            "values": [value(0.5 + i, 9.0 + i) for i in range(3)],
            "coverage": [value(1.0, 0.25 + i / 8) for i in range(3)],
            "sizes": [value(7, 8)],
        },
        {
            "names": (NAMES, ("other", *NAMES[1:])),
            "labels": (["a", "b", "c"], ["a", "b", "b"]),
            "chosen_on": ("nothing", "localizer"),
        },
    ),
    "FixedRegionTest on own masks": Case(
        interfaces.FixedRegionTest,
        {
            "values": [value(0.5 + i, 9.0 + i) for i in range(3)],
            "coverage": [value(1.0, 0.25 + i / 8) for i in range(3)],
            "sizes": [value(7, 8 + i) for i in range(3)],
            "replaced": [value(False, True) for _ in range(3)],
        },
        {},
        {"names": NAMES, "chosen_on": "other runs", "labels": list("abc")},
    ),
    "FixedRegionTest on a group mask": Case(
        interfaces.FixedRegionTest,
        {
            "values": [value(0.5 + i, 9.0 + i) for i in range(3)],
            "coverage": [value(1.0, 0.25 + i / 8) for i in range(3)],
            "sizes": [value(7, 8)],
            "replaced": [value(False, True)],
        },
        {"these_subjects": (False, True)},
        {"names": NAMES, "chosen_on": "group"},
    ),
    "FamilyTest": Case(
        interfaces.FamilyTest,
        {
            "values_file": table(0),
            "coverage_file": table(1),
            "sizes": [[value(7, 8), value(5, 9)]],
            "parcels": [value(1, 3), value(2, 4)],
        },
        {
            "names": (NAMES, ("other", *NAMES[1:])),
            "labels": (list("abcde"), list("abbcd")),
            "parcel_names": (["Arbor", "Brook"], ["Arbor", "Cinder"]),
            "min_coverage": (0.0, 0.5),
            "own_labels": (False, True),
        },
    ),
    "FamilyTest with a table": Case(
        interfaces.FamilyTest,
        {"values_file": table(0), "coverage_file": table(1), "table_file": label_table},
        fixed={"labels": list("abcde"), "parcels": [1, 2], "sizes": [[7, 5]], "names": NAMES},
    ),
}


# -- running and comparing ---------------------------------------------------------------------


def built(case: Case, folder: Path, changed: tuple[Any, ...] = ()) -> dict[str, Any]:
    """The inputs of a case, with the element at one place changed."""

    def at(item: Any, place: tuple[Any, ...]) -> Any:
        if isinstance(item, list):
            return [at(child, (*place, i)) for i, child in enumerate(item)]
        return item(folder, int(place == changed))

    made = {name: at(item, (name,)) for name, item in case.data.items()}
    made |= {name: both[int((name,) == changed)] for name, both in case.choices.items()}
    made |= case.fixed
    if "record_files" in made:
        (folder / "record.json").write_text('{"p_error": 0.1}')
        made["record_files"] = [str(folder / "record.json")] * len(made["record_files"])
    if case.interface is interfaces.FlipTest:  # it insists on the values of its own procedure
        made["values"] = held_out_values(made, folder)
    return made


def held_out_values(made: dict[str, Any], folder: Path) -> list[float]:
    chosen = {k: made[k] for k in ("in_files", "labels", "procedure")}
    masks = ran(interfaces.ChooseByFold, chosen, folder)["row_masks"]
    tested = made.get("tested_files", made["in_files"])
    read = {"mask_files": masks, "in_files": tested, "labels": made["labels"]}
    return ran(interfaces.Extract, read | {"clearance": "a test's"}, folder)["values"]


def ran(interface: type, inputs: dict[str, Any], folder: Path) -> dict[str, Any]:
    """The outputs of one run in a folder of its own."""
    work = folder / f"run{len(list(folder.iterdir()))}"
    work.mkdir()
    found = interface(**inputs).run(cwd=str(work)).outputs.get()
    assert all(isdefined(output) for output in found.values())
    return found


def content(output: Any) -> Any:
    """An output by what is in it: files by their bytes."""
    if isinstance(output, list | tuple):
        return [content(item) for item in output]
    if isinstance(output, str) and Path(output).is_file():
        return hashlib.sha256(Path(output).read_bytes()).hexdigest()
    return output


def places(case: Case) -> list[tuple[Any, ...]]:
    """Every element of every data input."""

    def walk(item: Any, place: tuple[Any, ...]) -> list[tuple[Any, ...]]:
        if isinstance(item, list):
            return [p for i, child in enumerate(item) for p in walk(child, (*place, i))]
        return [place]

    return [p for name, item in case.data.items() for p in walk(item, (name,))]


def elements(name: str, output: Any) -> dict[tuple[Any, ...], Any]:
    """The elements of an output: the items of a list (of lists), or the output itself."""
    made: dict[tuple[Any, ...], Any] = {}

    def walk(place: tuple[Any, ...], item: Any) -> None:
        if isinstance(item, list):
            for i, child in enumerate(item):
                walk((*place, i), child)
        else:
            made[place] = item

    walk((name,), output)
    return made


def contents(outputs: dict[str, Any]) -> dict[tuple[Any, ...], Any]:
    return {
        element: content(item)
        for name, output in outputs.items()
        for element, item in elements(name, output).items()
    }


def tree_of(
    case: Case, inputs: dict[str, Any], output: str, unit_of: dict[tuple[Any, ...], int]
) -> Tree:
    """An output's tree by the class's rule; the input elements named are units."""

    def tree(item: Any, place: tuple[Any, ...]) -> Tree:
        if isinstance(item, list) and place not in unit_of:
            return Branch([tree(child, (*place, i)) for i, child in enumerate(item)])
        bits = 1 << unit_of[place] if place in unit_of else 0
        return Leaf(Touch(values=bits), place=str(place))

    fields = {*case.data, *(place[0] for place in unit_of)}
    trees = {name: tree(inputs[name], (name,)) for name in fields}
    settings = settings_of(case.interface(**inputs).inputs)
    return case.interface.touch_rules.get(output, everything)(Inputs(trees, settings, "node"))


def touch_at(tree: Tree, element: tuple[Any, ...]) -> Touch:
    for i in element[1:]:
        if isinstance(tree, Branch):
            tree = tree.children[i]
    assert isinstance(tree, Leaf)
    return tree.touch


@dataclass(frozen=True)
class Seen:
    """What perturbing each element of the inputs did, and what the rules say."""

    changed: dict[tuple[Any, ...], set[tuple[Any, ...]]]  # input element -> output elements
    touch: dict[tuple[Any, ...], Touch]  # output element -> touch
    bit: dict[tuple[Any, ...], int]  # input element -> unit

    def values(self, element: tuple[Any, ...]) -> set[tuple[Any, ...]]:
        # What has selected an element is in it as well as what was read.
        return {place for place, i in self.bit.items() if self.touch[element].choosers >> i & 1}

    def geometry(self, element: tuple[Any, ...]) -> set[tuple[Any, ...]]:
        return {place for place, i in self.bit.items() if self.touch[element].geometry >> i & 1}

    def missed(self) -> list[str]:
        """Changes that no touch owns up to. A change of values is not one of geometry."""
        return [
            f"{element} changes with {place}"
            for place, changed in self.changed.items()
            for element in sorted(changed)
            if place not in self.values(element)
        ]


@pytest.fixture(scope="module")
def perturbed(tmp_path_factory: pytest.TempPathFactory) -> Callable[[str, str], Seen]:
    """Perturb each data element, or each parameter, of a case."""

    @cache
    def run(name: str, what: str) -> Seen:
        case, folder = CASES[name], tmp_path_factory.mktemp(name)
        where = places(case) if what == "data" else [(choice,) for choice in case.choices]
        inputs = built(case, folder)
        base = contents(ran(case.interface, inputs, folder))
        changed = {}
        for place in where:
            now = contents(ran(case.interface, built(case, folder, place), folder))
            changed[place] = {key for key in base if now.get(key) != base[key]}
        bit = {place: i for i, place in enumerate(where)}
        touch = {key: touch_at(tree_of(case, inputs, key[0], bit), key) for key in base}
        return Seen(changed, touch, bit)

    return run


# -- the rules ---------------------------------------------------------------------------------

GEOMETRY = {
    ("SphereMask", "reference"),
    ("GivenMask", "reference"),
    ("LabelMask", "reference"),
    ("RegridLabels", "reference"),
}


def test_every_interface_has_a_case():
    assert {case.interface.__name__ for case in CASES.values()} == set(interfaces.__all__)


@pytest.mark.parametrize("name", CASES)
def test_no_rule_understates(name: str, perturbed: Callable[[str, str], Seen]):
    assert perturbed(name, "data").missed() == []


@pytest.mark.parametrize("name", CASES)
def test_every_perturbation_of_values_is_felt_and_of_geometry_is_not(
    name: str, perturbed: Callable[[str, str], Seen]
):
    # Without this the test above could pass by changing nothing.
    seen = perturbed(name, "data")
    assert {p for p, changed in seen.changed.items() if not changed} == {
        (field,) for owner, field in GEOMETRY if owner == name
    }


@pytest.mark.parametrize(("name", "field"), sorted(GEOMETRY))
def test_what_only_gives_the_grid_is_touched_as_geometry(
    name: str, field: str, perturbed: Callable[[str, str], Seen]
):
    seen = perturbed(name, "data")
    for element in seen.touch:
        assert (field,) in seen.geometry(element)
        assert (field,) not in seen.values(element)


def test_another_grid_reaches_the_sphere(tmp_path: Path):
    moved = a_grid((6, 6, 6), 2.0)
    sizes = []
    for number, grid in enumerate((GRID, moved)):
        reference = str(write_map(tmp_path / f"grid{number}.nii", noise(0), grid))
        made = ran(
            interfaces.SphereMask,
            {"reference": reference, "centre": (6.0, 6.0, 6.0), "radius": 4.0, "origin": "x"},
            tmp_path,
        )
        sizes.append(int(read_map(made["mask_file"])[0].sum()))
    assert sizes == [7, 33]  # lattice points within 4/3 and within 2 steps


@pytest.mark.parametrize("name", [name for name, case in CASES.items() if case.choices])
def test_what_sets_a_parameter_is_touched(name: str, perturbed: Callable[[str, str], Seen]):
    # "Thresholds chosen by looking at the outcome are the same fault as voxels chosen so."
    assert perturbed(name, "choices").missed() == []


@pytest.mark.parametrize("name", [name for name, case in CASES.items() if case.choices])
def test_every_perturbation_of_a_parameter_is_felt(
    name: str, perturbed: Callable[[str, str], Seen]
):
    seen = perturbed(name, "choices")
    assert [place for place, changed in seen.changed.items() if not changed] == []


@pytest.mark.parametrize("name", CASES)
def test_no_rule_takes_a_list_for_one_element(name: str, tmp_path: Path):
    # Merge and MapNode count elements by what the trees say.
    case = CASES[name]
    inputs = built(case, tmp_path)
    for output, made in ran(case.interface, inputs, tmp_path).items():
        tree = tree_of(case, inputs, output, {})
        if isinstance(made, list):
            known = isinstance(tree, Branch) and len(tree.children) == len(made)
            assert known or (isinstance(tree, Leaf) and not tree.single), output


PRECISE = [
    ("SubjectMaps", "out_files"),
    ("LeaveOutMaps", "out_files"),
    ("LeaveOutMaps by a design", "out_files"),
    ("FoldLists", "selection_files"),
    ("FoldLists", "held_out_files"),
    ("MasksByRow", "row_masks"),
    ("ChooseByFold", "mask_files"),
    ("ChooseByFold", "row_masks"),
    ("ChooseWithin", "row_masks"),
    ("Extract", "values"),
    ("Extract weighted", "values"),
    ("Extract a component", "values"),
]


@pytest.mark.parametrize(("name", "output"), PRECISE)
def test_precise_rules_do_not_overstate(
    name: str, output: str, perturbed: Callable[[str, str], Seen]
):
    seen = perturbed(name, "data")
    mine = [element for element in seen.touch if element[0] == output]
    assert len(mine) == {
        "SubjectMaps": 3,
        "LeaveOutMaps": 2,
        "LeaveOutMaps by a design": 7,
        "ChooseWithin": 7,
    }.get(name, 5)
    for element in mine:
        felt = {place for place, changed in seen.changed.items() if element in changed}
        assert felt == seen.values(element), element


def test_mask_of_a_fold_does_not_touch_who_it_holds_out(perturbed: Callable[[str, str], Seen]):
    seen = perturbed("ChooseByFold", "data")
    everybody = {("in_files", row) for row in range(5)} | {("search_file",)}
    for row, person in enumerate(PEOPLE):
        assert seen.values(("row_masks", row)) == everybody - {("in_files", row)}
        fold = sorted(PEOPLE).index(person)
        assert seen.values(("mask_files", fold)) == everybody - {("in_files", row)}


def test_value_and_coverage_touch_their_own_mask_and_map(perturbed: Callable[[str, str], Seen]):
    seen = perturbed("Extract", "data")
    for i in range(5):
        own = {("mask_files", i), ("in_files", i)}
        assert seen.values(("values", i)) == own
        assert seen.values(("coverage", i)) == own
        assert not any(field == "in_files" for field, *_ in seen.values(("sizes", i)))


# -- a held-out map may be anything ------------------------------------------------------------


def variant_of(kind: str, folder: Path) -> str:
    """A map that stands in for a held-out one."""
    data: Any = {
        "another map": noise(77),
        "NaN": np.full(GRID.shape, np.nan, np.float32),
        "zeros": np.zeros(GRID.shape, np.float32),
        "1e30": np.full(GRID.shape, 1e30, np.float32),
        "-1e30": np.full(GRID.shape, -1e30, np.float32),
        "-1e300": np.full(GRID.shape, -1e300),
        "its own values as float64": noise(2).astype(np.float64),
    }[kind]
    return str(write_map(folder / "stand-in.nii", data, GRID))


ORDINARY = ["another map", "NaN", "zeros", "1e30", "-1e30"]


def fold_files(interface: type, output: str, files: list[str], folder: Path) -> list[Any]:
    inputs: dict[str, Any] = {"in_files": files, "labels": list(PEOPLE)}
    if interface is interfaces.ChooseByFold:
        inputs["procedure"] = PROCEDURES[0]
    return content(ran(interface, inputs, folder)[output])


@pytest.mark.parametrize(
    ("interface", "output", "kind"),
    [
        *((interfaces.ChooseByFold, "mask_files", kind) for kind in ORDINARY),
        *((interfaces.LeaveOutMaps, "out_files", kind) for kind in ORDINARY),
        (interfaces.ChooseByFold, "mask_files", "its own values as float64"),
        (interfaces.ChooseByFold, "mask_files", "-1e300"),
        (interfaces.LeaveOutMaps, "out_files", "its own values as float64"),
    ],
)
def test_what_a_fold_makes_does_not_depend_on_what_it_holds_out(
    interface: type, output: str, kind: str, tmp_path: Path
):
    files = [image(noise, i)(tmp_path, 0) for i in range(5)]
    base = fold_files(interface, output, files, tmp_path)
    files[2] = variant_of(kind, tmp_path)  # PEOPLE[2] is the third fold
    now = fold_files(interface, output, files, tmp_path)
    assert now[2] == base[2]
    if "own values" not in kind:
        assert now[0] != base[0]


# -- load, one call, save ----------------------------------------------------------------------


def test_chosen_masks_are_those_of_the_procedure(tmp_path: Path):
    files = [image(noise, i)(tmp_path, 0) for i in range(5)]
    made = ran(
        interfaces.ChooseByFold,
        {"in_files": files, "labels": list(PEOPLE), "procedure": PROCEDURES[0]},
        tmp_path,
    )
    effects = np.stack([read_map(path)[0].ravel() for path in files])
    masks = PROCEDURES[0].prepare(effects, PEOPLE, Grid(GRID.shape, GRID.affine)).masks()
    for path, mask in zip(made["mask_files"], masks, strict=True):
        assert np.array_equal(read_map(path)[0].ravel() != 0, mask)
    assert made["fold_names"] == sorted(PEOPLE)
    share = read_map(made["overlap_file"])[0].ravel()
    assert np.allclose(share, np.mean(masks, axis=0))


def test_extraction_without_clearance_is_refused(tmp_path: Path):
    inputs = built(CASES["Extract"], tmp_path) | {"clearance": ""}
    with pytest.raises(Refused, match="no clearance: run the workflow under the guard"):
        ran(interfaces.Extract, inputs, tmp_path)


def test_a_clearance_is_no_part_of_what_is_computed(tmp_path: Path):
    inputs = built(CASES["Extract"], tmp_path)
    hashes = {
        interfaces.Extract(**inputs | {"clearance": word}).inputs.get_hashval()[1]
        for word in ("", "one", "another")
    }
    assert len(hashes) == 1


def test_masks_and_maps_must_pair_up(tmp_path: Path):
    inputs = built(CASES["Extract"], tmp_path)
    inputs["mask_files"] = inputs["mask_files"][:2]
    with pytest.raises(InputError, match="masks and maps do not pair up: got 2, 5"):
        ran(interfaces.Extract, inputs, tmp_path)


def test_flip_test_refuses_values_of_another_procedure(tmp_path: Path):
    inputs = built(CASES["FlipTest"], tmp_path)
    inputs["values"] = [v + 1 for v in inputs["values"]]
    with pytest.raises(SequesterError, match="not those of the procedure that is tested"):
        ran(interfaces.FlipTest, inputs, tmp_path)


def test_an_input_error_survives_in_the_working_folder(tmp_path: Path):
    inputs = built(CASES["SubjectMaps"], tmp_path) | {"labels": ["a"]}
    with pytest.raises(InputError) as raised:
        ran(interfaces.SubjectMaps, inputs, tmp_path)
    (folder,) = (p.parent for p in tmp_path.glob("run*/sequester-error.json"))
    kept = kept_error(folder)
    assert isinstance(kept, InputError)
    assert kept.fields == raised.value.fields
    assert str(kept) == str(raised.value)
    (tmp_path / "clean").mkdir()
    assert kept_error(tmp_path / "clean") is None


def test_a_stop_on_an_empty_fold_survives_as_what_it_is(tmp_path: Path):
    stop = Procedure(Threshold(height=99.0), on_empty="stop")
    inputs = built(CASES["ChooseByFold"], tmp_path) | {"procedure": stop}
    with pytest.raises(EmptyFoldError, match="5 of 5 folds found no region"):
        ran(interfaces.ChooseByFold, inputs, tmp_path)
    (folder,) = (p.parent for p in tmp_path.glob("run*/sequester-error.json"))
    assert type(kept_error(folder)) is EmptyFoldError


@pytest.mark.parametrize(
    ("row_labels", "said"),
    [
        ([list("abc"), list("ab")], "each region: 3, 3, got 3, 2"),
        ([list("abc")], "each region: 3, 3, got 3"),
        ([list("abc"), list("abd")], "regions of different people"),
    ],
)
def test_labels_that_do_not_go_with_the_values_of_regions_are_told(row_labels, said, tmp_path):
    node = interfaces.CompareFixed(kind="difference", names=["Arbor", "Brook"], labels=list("abc"))
    node.inputs.values, node.inputs.row_labels = [[1.0, 2.0, 4.0], [2.0, 1.0, 0.5]], row_labels
    with pytest.raises(InputError, match=said) as told:
        node.run(cwd=tmp_path)
    assert told.value.fields["where"] == "row_labels" and told.value.fields["remedy"]
