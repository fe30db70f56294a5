"""Any group software between the folds, and two groups: lists, masks by row, and what is said."""

from __future__ import annotations

import json
from dataclasses import replace
from pathlib import Path
from typing import Any

import numpy as np
import pytest
from nipype import Function, Node, Workflow
from planting import a_grid, plant
from scipy import stats
from sequester.nodes.design import two_sample
from sequester.nodes.errors import InputError
from sequester.nodes.folds import KFold, LeaveOneOut
from sequester.nodes.heldout import held_out_difference, held_out_result
from sequester.nodes.images import read_map, write_map
from sequester.nodes.interfaces import (
    ChooseMask,
    FixedRegionTest,
    FoldLists,
    GivenMask,
    GroupMap,
    LeaveOutMaps,
    MasksByRow,
)
from sequester.nodes.interfaces.foldlists import fold_of_row
from sequester.nodes.masks import Strongest, Threshold
from sequester.nodes.roi import one_sample_t
from sequester.nodes.rules import Branch, Inputs, Leaf
from sequester.nodes.touch import Touch
from sequester.workflows.around import around_folds, compared
from sequester.workflows.guard import GuardPlugin, GuardRefused
from sequester.workflows.study import Origin, Study

GRID = a_grid((6, 6, 6))
LABELS = ["08", "01", "06", "03", "05", "02", "07", "04"]  # out of order: fold k is not row k
GROUPS = ["hill", "pond", "pond", "hill", "pond", "hill", "hill", "pond"]
AGES = [31.0, 45.0, 52.0, 28.0, 60.0, 39.0, 33.0, 41.0]
NAMES = ("Arbor", "folds", "garden")
# Somebody's group software: nibabel and a model of its own, no touch rule.
OTHERS = """
def group(in_files, weight):
    import os
    import nibabel
    import numpy
    images = [nibabel.load(path) for path in in_files]
    data = weight * numpy.median([image.get_fdata() for image in images], axis=0)
    path = os.path.abspath("median.nii.gz")
    nibabel.save(nibabel.Nifti1Image(data.astype("float32"), images[0].affine), path)
    return path
"""


pytestmark = pytest.mark.usefixtures("quiet_engine")


@pytest.fixture
def study(tmp_path: Path) -> Study:
    """Eight gardeners with an effect map each, and a search region of declared origin."""
    maps = {}
    for label in LABELS:
        data = np.random.default_rng(int(label)).normal(0.8, 1, GRID.shape).astype(np.float32)
        data[0, :, :2] = 0  # outside the field of view
        maps[label] = data
    inside = np.ones(GRID.shape, bool)
    inside[5] = False
    origin = Origin("a garden plan of 1909", ("garden.nii",))
    told = {"place": GROUPS, "age": AGES}
    return plant(tmp_path / "study", maps, GRID, {"garden": inside}, [origin], told)


def medians() -> Function:
    made = Function(input_names=["in_files", "weight"], output_names=["median"])
    made.inputs.function_str = OTHERS
    made.inputs.weight = 2.0
    return made


def search(study: Study) -> Node:
    garden, like = str(study.root / "garden.nii"), str(study.root / "sub-01.nii")
    return Node(GivenMask(in_file=garden, reference=like), name="garden")


def around(study: Study, **more: Any) -> Workflow:
    return around_folds(
        "Arbor",
        medians(),
        "in_files",
        "median",
        Strongest(9),
        LABELS,
        search=search(study),
        search_name="garden",
        **more,
    )


def given(plan: Workflow, maps: list[str]) -> Workflow:
    plan.base_dir = str(Path.cwd() / "work")
    plan.inputs.inputnode.effects = maps
    return plan


def ran(plan: Workflow, study: Study) -> tuple[GuardPlugin, dict[str, Any]]:
    """The guard's findings, and the outputs of the nodes by name."""
    guard = GuardPlugin(study)
    done = plan.run(plugin=guard)
    return guard, {node.name: node.result.outputs for node in done.nodes()}


def volumes(maps: list[str]) -> np.ndarray:
    return np.stack([read_map(path)[0] for path in maps])


def strongest_in_garden(values: np.ndarray, k: int = 9) -> np.ndarray:
    """The k highest voxels of a group map inside the search region."""
    values = values.copy()
    values[5] = -np.inf
    mask = np.zeros(values.size, bool)
    mask[np.argsort(-values.ravel(), kind="stable")[:k]] = True
    return mask.reshape(values.shape)


# -- around any group software -------------------------------------------------------------------


@pytest.mark.parametrize("scheme", [None, KFold(3, seed=4)])
def test_held_out_values_equal_a_plain_loop(study: Study, maps: list[str], scheme: Any):
    guard, outputs = ran(given(around(study, scheme=scheme), maps), study)
    read = [f for f in guard.findings if f.kind == "extraction"]
    assert [(f.verdict, f.level) for f in read] == [("apart", "subject")] * 8
    assert [f.verdict for f in guard.findings if f.kind == "statistic"] == ["apart"]
    for row, finding in enumerate(read):  # the mask touches everybody but the row's own fold
        held = [fold.held_out for fold in (scheme or LeaveOneOut()).folds(LABELS)]
        out = next(rows for rows in held if row in rows)
        subs = {unit.sub for unit in study.table.units_of(finding.mask_units)}
        assert subs == {LABELS[i] for i in range(8) if i not in out}

    data, values = volumes(maps), np.zeros(8)
    for fold in (scheme or LeaveOneOut()).folds(LABELS):
        mask = strongest_in_garden(2 * np.median(data[list(fold.selection)], axis=0))
        for row in fold.held_out:
            inside = data[row][mask]
            values[row] = inside[inside != 0].mean()
    np.testing.assert_allclose(outputs["extract"].values, values, rtol=1e-6)
    record = json.loads(Path(outputs["summary"].record_file).read_text())
    assert record["estimate"] == pytest.approx(values.mean(), rel=1e-6)
    assert record["p"] is record["t"] is record["dz"] is None
    assert record["mask_sizes"] == [9] * 8
    assert record["plan"] == ("folds over subjects" if scheme else "leave-one-subject-out")
    assert record["n_folds"] == (3 if scheme else 8)
    assert "No p-value: the group maps were made outside the procedure" in record["sentence"]
    assert (record["interval"] is None) == (scheme is None)
    if scheme:
        plain = one_sample_t(values).interval
        wide = record["interval"]["high"] - record["interval"]["low"]
        assert wide / (plain.high - plain.low) == pytest.approx(np.sqrt(2.5))
        assert record["interval"]["kind"] == "approximate"


def test_labels_of_each_list_go_with_it(study: Study, maps: list[str]):
    body = OTHERS.replace("weight):", "weight, who):\n    assert len(who) == len(in_files)\n"
                          "    for label, path in zip(who, in_files):\n"
                          "        assert path.endswith(f'sub-{label}.nii')")  # fmt: skip
    group = Function(input_names=["in_files", "weight", "who"], output_names=["median"])
    group.inputs.function_str = body
    group.inputs.weight = 2.0
    plan = around_folds(
        "Arbor", group, "in_files", "median", Strongest(9), LABELS, labels_field="who"
    )
    guard, _ = ran(given(plan, maps), study)
    assert {f.verdict for f in guard.findings} == {"apart"}


def test_masks_in_the_wrong_order_are_refused(study: Study, maps: list[str]):
    plan = given(around(study), maps)
    rows = plan.get_node("rows")
    rows.inputs.fold_of_row = [(k + 1) % 8 for k in rows.inputs.fold_of_row]
    with pytest.raises(GuardRefused, match=r"chosen on the data it would be\stested") as raised:
        plan.run(plugin=GuardPlugin(study, dry=True))
    # Each mask meets one map that chose it; the values of all of them are then refused too.
    assert [f.kind for f in raised.value.findings] == ["extraction"] * 8 + ["statistic"]


def test_a_map_of_everybody_is_refused(study: Study, maps: list[str]):
    plan = given(around(study), maps)
    folds, group = plan.get_node("folds"), plan.get_node("group")
    plan.disconnect(folds, "selection_files", group, "in_files")
    group.inputs.in_files = [maps] * 8
    with pytest.raises(GuardRefused, match="before anything ran: 2 causes, 9 findings"):
        plan.run(plugin=GuardPlugin(study, dry=True))


def test_which_row_has_which_mask_must_be_a_literal(study: Study, maps: list[str]):
    plan = given(around(study), maps)
    plan.connect(plan.get_node("folds"), "fold_of_row", plan.get_node("rows"), "fold_of_row")
    with pytest.raises(GuardRefused, match="before anything ran: 2 causes, 9 findings"):
        plan.run(plugin=GuardPlugin(study, dry=True))


def test_a_plain_t_on_the_held_out_values_is_refused(study: Study, maps: list[str]):
    plan = given(around(study), maps)
    test = Node(FixedRegionTest(names=NAMES, labels=LABELS), name="test")
    fields = ("values", "coverage", "sizes")
    plan.connect([(plan.get_node("extract"), test, [(f, f) for f in fields])])
    with pytest.raises(GuardRefused, match=r"rejects a true\snull far more often"):
        plan.run(plugin=GuardPlugin(study, dry=True))


def test_what_cannot_be_wired_is_said_when_the_plan_is_built():
    about = ("Arbor", medians())
    with pytest.raises(
        InputError, match=r"no such field \(files\): expected one of function_str, in"
    ):
        around_folds(*about, "files", "median", Strongest(9), LABELS)
    with pytest.raises(InputError, match=r"no such field \(out_file\): expected one of median"):
        around_folds(*about, "in_files", "out_file", Strongest(9), LABELS)
    with pytest.raises(InputError, match=r"threshold as p .* got p = 0.001; .* give height"):
        around_folds(*about, "in_files", "median", Threshold(p=0.001), LABELS)


# -- two groups ----------------------------------------------------------------------------------


@pytest.mark.parametrize("scheme", [None, KFold(3, strata=tuple(zip(LABELS, GROUPS, strict=True)))])
def test_a_difference_of_two_groups_equals_a_plain_loop(study: Study, maps: list[str], scheme: Any):
    design = two_sample(GROUPS, "pond", "hill", {"age": AGES})
    plan = compared("Arbor", design, Threshold(p=0.2), LABELS, GROUPS, scheme)
    guard, outputs = ran(given(plan, maps), study)
    assert [f.verdict for f in guard.findings] == ["apart"] * 9

    data, values, X = volumes(maps), np.zeros(8), design.matrix()
    for fold in (scheme or LeaveOneOut()).folds(LABELS):
        rows = list(fold.selection)
        beta, rest = np.linalg.lstsq(X[rows], data[rows].reshape(len(rows), -1), rcond=None)[:2]
        inverse = np.linalg.inv(X[rows].T @ X[rows])
        df, c = len(rows) - 3, np.array(design.contrast)
        with np.errstate(invalid="ignore"):  # the voxels outside the field of view
            t = (c @ beta / np.sqrt(rest / df * (c @ inverse @ c))).reshape(GRID.shape)
        mask = t > stats.t.isf(0.2, df)
        assert 5 < mask.sum() < 80
        for row in fold.held_out:
            values[row] = data[row][mask].mean()
    np.testing.assert_allclose(outputs["extract"].values, values, rtol=1e-6)
    pond = np.array(GROUPS) == "pond"
    record = json.loads(Path(outputs["summary"].record_file).read_text())
    assert record["estimate"] == pytest.approx(values[pond].mean() - values[~pond].mean(), rel=1e-5)
    assert record["p"] is record["interval"] is None
    assert "exchanges the group labels of the whole procedure" in record["sentence"]
    assert record["rule"] == "all voxels with p < 0.2"


def test_a_design_that_compares_no_groups_is_refused_when_the_plan_is_built():
    lonely = replace(two_sample(GROUPS, "pond", "hill"), contrast=(1.0, 1.0))
    with pytest.raises(InputError, match="does not compare two groups"):
        compared("Arbor", lonely, Strongest(9), LABELS, GROUPS)


def test_the_order_of_rows_changes_no_bit_of_a_folds_map(maps: list[str], tmp_path: Path):
    for path in maps:  # far from zero, so that the order of a sum would show
        data, grid = read_map(path)
        write_map(path, np.where(data, data.astype(float) * np.pi + 1e5, 0.0), grid)
    made = []
    for number, order in enumerate(([0, 1, 2, 3, 4, 5, 6, 7], [6, 2, 0, 7, 4, 1, 3, 5])):
        folder = tmp_path / f"order{number}"
        folder.mkdir()
        design = two_sample([GROUPS[row] for row in order], "pond", "hill")
        node = LeaveOutMaps(
            in_files=[maps[row] for row in order],
            labels=[LABELS[row] for row in order],
            scheme=KFold(2),
        )
        for given in (None, design):
            if given is not None:
                node.inputs.design = given
            outputs = node.run(cwd=str(folder)).outputs
            made.append([Path(f).read_bytes() for f in outputs.out_files + outputs.count_files])
    assert made[0] == made[2]
    assert made[1] == made[3]
    assert made[0] != made[1]


def test_counts_give_a_p_the_degrees_of_freedom_of_the_design(maps: list[str], tmp_path: Path):
    design = two_sample(GROUPS, "pond", "hill")
    made = GroupMap(in_files=maps, design=design).run(cwd=str(tmp_path)).outputs
    mask_file = (
        ChooseMask(in_file=made.out_file, count_file=made.count_file, rule=Threshold(p=0.1))
        .run(cwd=str(tmp_path))
        .outputs.mask_file
    )
    data, pond = volumes(maps), np.array(GROUPS) == "pond"
    with np.errstate(invalid="ignore"):
        p = stats.ttest_ind(data[pond], data[~pond], alternative="greater").pvalue
    mask = read_map(mask_file)[0] != 0
    assert (mask == (p < 0.1)).all()
    assert 5 < mask.sum() < 60


def test_rows_that_do_not_pair_up_are_named(maps: list[str], tmp_path: Path):
    short = two_sample(GROUPS[:7], "pond", "hill")
    with pytest.raises(InputError, match=r"differ in rows: got .*'labels': 8, 'design': 7"):
        LeaveOutMaps(in_files=maps, labels=LABELS, design=short).run(cwd=str(tmp_path))
    with pytest.raises(InputError, match="maps and labels do not pair up: got 8, 7"):
        FoldLists(in_files=maps, labels=LABELS[:7]).run(cwd=str(tmp_path))
    with pytest.raises(InputError, match=r"masks and folds .* got 8 masks, folds \[0, 1, 8\]"):
        MasksByRow(mask_files=maps, fold_of_row=[0, 1, 8]).run(cwd=str(tmp_path))


# -- lists ---------------------------------------------------------------------------------------


def test_lists_are_those_of_the_folds(maps: list[str], tmp_path: Path):
    scheme = KFold(3, seed=1)
    made = FoldLists(in_files=maps, labels=LABELS, scheme=scheme).run(cwd=str(tmp_path)).outputs
    for k, fold in enumerate(scheme.folds(LABELS)):
        assert made.selection_files[k] == [maps[row] for row in fold.selection]
        assert made.held_out_files[k] == [maps[row] for row in fold.held_out]
        assert made.selection_labels[k] == [LABELS[row] for row in fold.selection]
        assert made.held_out_labels[k] == [LABELS[row] for row in fold.held_out]
        assert all(made.fold_of_row[row] == k for row in fold.held_out)
    assert made.fold_names == ["1of3", "2of3", "3of3"]


def tree(field: str, inputs: Inputs) -> Any:
    def plain(tree: Any) -> Any:
        if isinstance(tree, Leaf):
            return tree.touch.values if tree.single else ("some of", tree.touch.values)
        return [plain(child) for child in tree.children]

    return plain(FoldLists.touch_rules[field](inputs))


def test_what_is_known_of_the_lists_before_the_run():
    files = Branch([Leaf(Touch(values=1 << row)) for row in range(3)])
    settings = {"labels": ["b", "a", "c"]}
    known = Inputs({"in_files": files}, settings, "folds")
    assert tree("selection_files", known) == [[1, 4], [2, 4], [1, 2]]
    assert tree("held_out_files", known) == [[2], [1], [4]]
    assert tree("selection_labels", known) == [[0, 0], [0, 0], [0, 0]]
    assert tree("fold_names", known) == [0, 0, 0]
    # Labels that arrive: from data of unit 8, and in an order not known.
    labels = Leaf(Touch(values=8), single=False)
    trees = {"in_files": files, "labels": labels}
    arriving = Inputs(trees, {}, "folds", frozenset({"labels"}))
    assert tree("selection_files", arriving) == ("some of", 15)
    assert tree("selection_labels", arriving) == ("some of", 8)
    # Maps whose number is not known.
    some = Inputs({"in_files": Leaf(Touch(values=7), single=False)}, settings, "folds")
    assert tree("selection_files", some) == ("some of", 7)
    assert tree("fold_of_row", some) == [0, 0, 0]


def test_rows_of_one_label_share_a_fold():
    assert fold_of_row(LeaveOneOut().folds(["b", "a", "b", "c"])) == [1, 0, 1, 2]


# -- what may be said ----------------------------------------------------------------------------


def test_rows_of_a_person_are_averaged_and_empty_masks_are_told():
    made = held_out_result(
        [1.0, 3.0, 5.0, 0.0],
        ["a", "a", "b", "c"],
        NAMES,
        3,
        [4, 4, 4, 0],
        [1.0, 0.5, 1.0, 0.0],
        "r",
    )
    assert made.estimate == pytest.approx((2 + 5 + 0) / 3)
    assert (made.n_subjects, made.coverage, made.interval) == (3, 0.5, None)
    assert "no interval, for which the folds are too many" in made.sentence


@pytest.mark.parametrize("groups", [False, True])
def test_where_a_mask_is_empty_the_estimate_is_no_effect_size(groups):
    def made(*sizes):
        about = (NAMES, 2, sizes, [1.0] * 4, "r")
        if groups:
            of = ["hill", "pond"] * 2
            return held_out_difference([1, 3, 5, 0], list("abcd"), of, ("hill", "pond"), *about)
        return held_out_result([1.0, 3.0, 5.0, 0.0], list("abcd"), *about)

    full, some = made(4, 4, 4, 4), made(4, 4, 4, 0)
    assert some.estimate == full.estimate
    assert (some.interval, some.dz, some.g, some.p) == (None,) * 4
    assert (full.interval is None) == groups
    told = (
        "1 of 4 masks are empty; there the value counts as 0, so the estimate is not the size of "
        "an effect and has no interval."
    )
    assert some.sentence.endswith(told) and "interval " not in some.sentence.replace(told, "")
    assert "masks are empty" not in full.sentence
    assert some.target == f"{full.target}, 0 in the empty ones: not the size of an effect"


def test_a_difference_counts_people_and_only_the_groups_compared():
    labels, groups = ["a", "a", "b", "c", "d"], ["hill", "hill", "pond", "pond", "fen"]
    about = (NAMES, 2, [4], [1.0], "r")
    values = [1.0, 3.0, 5.0, 6.0, 99.0]
    made = held_out_difference(values, labels, groups, ("hill", "pond"), *about)
    assert (made.estimate, made.n_subjects) == (2 - 5.5, 3)
    assert "held-out mean of hill (n = 1) minus that of pond (n = 2) -3.5" in made.sentence
    with pytest.raises(InputError, match=r"a group without subjects \(moor\): expected one of fen"):
        held_out_difference(values, labels, groups, ("hill", "moor"), *about)
    with pytest.raises(InputError, match=r"a subject in two groups \(a\): got hill and pond"):
        held_out_difference(values, labels, ["hill", *groups[2:], "fen"], ("hill", "pond"), *about)
