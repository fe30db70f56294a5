"""A parcellation in one extraction and one family of tests, against loops and outside code."""

from __future__ import annotations

import json
from pathlib import Path
from typing import Any

import nibabel as nib
import numpy as np
import pytest
from hypothesis import given
from hypothesis import strategies as st
from nipype import Node, Workflow
from nipype.pipeline.engine.nodes import NodeExecutionError
from planting import a_grid, plant
from scipy import stats
from sequester.nodes.errors import InputError, Refused
from sequester.nodes.fixed import family_results, fixed_region_result
from sequester.nodes.folds import LeaveOneOut
from sequester.nodes.groupmaps import Missing
from sequester.nodes.images import Geometry, read_map, write_map
from sequester.nodes.interfaces import (
    ChooseByFold,
    ChooseMask,
    ExtractParcels,
    FamilyTest,
    GroupMap,
)
from sequester.nodes.masks import Strongest, Threshold
from sequester.nodes.parcels import Parcellation, family_t, label_means, person_means
from sequester.nodes.procedure import Procedure
from sequester.nodes.roi import one_sample_t, per_person
from sequester.workflows.guard import GuardPlugin, GuardRefused
from sequester.workflows.plans import parcels
from sequester.workflows.study import Origin, Study
from statsmodels.stats.multitest import multipletests

GRID, OTHER = a_grid((6, 5, 7)), a_grid((4, 6, 5), 2.0)
LABELS = [f"{i:02d}" for i in range(1, 9)]
NAMES = ("lanterns", "given", "the atlas of 1909")
NUMBERS = [2, 5, 9, 40]


pytestmark = pytest.mark.usefixtures("quiet_engine")


def effects(seed: int, grid: Geometry = GRID) -> Any:
    """A map with a tenth of its voxels outside the field of view, or not finite."""
    rng = np.random.default_rng(seed)
    data = rng.normal(0.8, 1, grid.shape).astype(np.float32)
    data[rng.random(grid.shape) < 0.05] = 0
    data[rng.random(grid.shape) < 0.05] = np.nan
    return data


def atlas(seed: int, grid: Geometry = GRID, numbers: Any = (0, *NUMBERS)) -> Any:
    return np.random.default_rng(seed).choice(np.array(numbers, np.int16), grid.shape)


def saved(path: Path, data: Any, grid: Geometry = GRID) -> str:
    return str(write_map(path, data, grid))


def extracted(folder: Path, **inputs: Any) -> tuple[Any, Any, Any]:
    """Values, coverage and all outputs of a run of the node."""
    folder.mkdir(exist_ok=True)
    inputs = {"labels": ["x"] * len(inputs["in_files"]), "clearance": "a test's"} | inputs
    made = ExtractParcels(**inputs).run(cwd=str(folder)).outputs
    return np.load(made.values_file), np.load(made.coverage_file), made


def plain(label_file: str, map_file: str, number: int) -> tuple[float, float]:
    """Mean and coverage of one parcel, as anybody would write them."""
    labels, data = (np.asanyarray(nib.load(f).dataobj) for f in (label_file, map_file))
    inside = data[labels == number].astype(float)
    good = inside[np.isfinite(inside) & (inside != 0)]
    if not len(good):
        return np.nan, 0.0
    return good.mean(), len(good) / len(inside)


# -- the means ---------------------------------------------------------------------------------


@pytest.mark.parametrize("dtype", [np.int16, np.uint8, np.float32, np.float64])
def test_values_and_coverage_are_those_of_a_plain_loop(dtype: type, tmp_path: Path):
    labels = saved(tmp_path / "atlas.nii.gz", atlas(99).astype(dtype))
    maps = [saved(tmp_path / f"{i}.nii.gz", effects(i)) for i in range(3)]
    values, coverage, made = extracted(tmp_path / "run", label_files=labels, in_files=maps)
    assert made.parcels == NUMBERS
    image = np.asanyarray(nib.load(labels).dataobj)
    assert made.sizes == [[int((image == number).sum()) for number in NUMBERS]]
    for i, path in enumerate(maps):
        for j, number in enumerate(NUMBERS):
            mean, share = plain(labels, path, number)
            assert values[i, j] == pytest.approx(mean, rel=1e-12)
            assert coverage[i, j] == share
    assert 0.5 < coverage.min() < 1  # some data was missing


def test_a_label_image_per_map_each_on_a_grid_of_its_own(tmp_path: Path):
    images = [
        saved(tmp_path / "one.nii", atlas(1), GRID),
        saved(tmp_path / "two.nii", atlas(2, OTHER, (0, 5, 7)), OTHER),
    ]
    maps = [
        saved(tmp_path / "a.nii", effects(1), GRID),
        saved(tmp_path / "b.nii", effects(2, OTHER), OTHER),
    ]
    values, coverage, made = extracted(tmp_path / "run", label_files=images, in_files=maps)
    assert made.parcels == [2, 5, 7, 9, 40]
    for i in range(2):
        for j, number in enumerate(made.parcels):
            expected = plain(images[i], maps[i], number)
            assert (values[i, j], coverage[i, j]) == pytest.approx(expected, rel=1e-12, nan_ok=True)
    assert np.isnan(values[1, [0, 3, 4]]).all()
    assert [row[2] == 0 for row in made.sizes] == [True, False]


def test_chosen_parcels_keep_their_order_and_low_coverage_has_no_value(tmp_path: Path):
    labels = saved(tmp_path / "atlas.nii", atlas(99))
    maps = [saved(tmp_path / f"{i}.nii", effects(i)) for i in range(3)]
    inputs = {"label_files": labels, "in_files": maps}
    whole, share, _ = extracted(tmp_path / "all", **inputs)
    least = float(np.median(share))
    some, kept, made = extracted(tmp_path / "b", **inputs, parcels=[40, 5], min_coverage=least)
    assert made.parcels == [40, 5]
    assert np.array_equal(kept, share[:, [3, 1]])
    expected = np.where(share < least, np.nan, whole)[:, [3, 1]]
    assert np.array_equal(some, expected, equal_nan=True)
    assert 0 < np.isnan(some).sum() < some.size


def test_a_map_has_the_same_values_in_any_company_and_the_same_bytes(tmp_path: Path):
    labels = saved(tmp_path / "atlas.nii", atlas(99))
    maps = [saved(tmp_path / f"{i}.nii", effects(i)) for i in range(4)]
    first, _, made = extracted(tmp_path / "a", label_files=labels, in_files=maps)
    back, _, _ = extracted(tmp_path / "b", label_files=labels, in_files=maps[::-1])
    assert np.array_equal(first, back[::-1])
    _, _, again = extracted(tmp_path / "c", label_files=[labels] * 4, in_files=maps)
    for name in ("values_file", "coverage_file"):
        one, two = (Path(getattr(outputs, name)) for outputs in (made, again))
        assert one.read_bytes() == two.read_bytes()


def test_a_parcel_without_data_is_nan_and_a_zero_can_be_data():
    image = np.array([[[4, 4, 6, 0]]])
    data = np.array([[[0.0, 0.0, 3.0, 8.0]]], np.float32)
    means, coverage = Parcellation(image).means(data, Missing())
    assert np.isnan(means[0])
    assert coverage.tolist() == [0, 1]
    assert Parcellation(image).means(data, Missing(zeros=False))[0].tolist() == [0, 3]


@given(st.integers(0, 2**32 - 1), st.integers(1, 60))
def test_adding_up_all_parcels_gives_the_whole(seed: int, n: int):
    rng = np.random.default_rng(seed)
    parcel, values = rng.integers(0, 5, n), rng.normal(size=n)
    present = rng.random(n) < 0.7
    sizes = np.bincount(parcel, minlength=6)
    means, coverage = label_means(values, parcel, sizes, present)
    counts = coverage * sizes
    assert counts.sum() == pytest.approx(present.sum())
    assert np.nansum(means * counts) == pytest.approx(values[present].sum())
    assert np.isnan(means).tolist() == (counts == 0).tolist()


# -- the family --------------------------------------------------------------------------------


def table(seed: int = 3, n: int = 12, parcels: int = 30) -> Any:
    """Values of which some are lacking; the last three parcels cannot be tested."""
    rng = np.random.default_rng(seed)
    values = rng.normal(0.9, 1, (n, parcels))
    values[rng.random(values.shape) < 0.2] = np.nan
    values[:, -3] = np.nan
    values[1:, -2] = np.nan
    values[0, -2] = 1
    values[:, -1] = 0.1
    return values


def test_family_agrees_with_scipy_and_statsmodels():
    values = table()
    family = family_t(values)
    for one, column in zip(family[:-3], values.T, strict=False):
        x = column[np.isfinite(column)]
        outside = stats.ttest_1samp(x, 0)
        assert one.test is not None
        assert one.n == len(x) < 13
        assert one.mean == one.test.mean == pytest.approx(x.mean(), rel=1e-12)
        assert one.test.t == pytest.approx(outside.statistic, rel=1e-12)
        assert one.test.p == pytest.approx(outside.pvalue, rel=1e-10)
        interval = outside.confidence_interval(0.95)
        made = (one.test.interval.low, one.test.interval.high)
        assert made == pytest.approx(tuple(interval), rel=1e-10)
        assert one.test.dz == pytest.approx(x.mean() / x.std(ddof=1), rel=1e-12)
    p = [one.test.p for one in family[:-3]]
    adjusted = multipletests(p, method="holm")[1]
    assert [one.p_holm for one in family[:-3]] == pytest.approx(adjusted, rel=1e-12)
    assert 0 < sum(adjusted < 0.05) < len(adjusted)


def test_parcels_that_cannot_be_tested_say_why_and_do_not_count():
    *_, nobody, one_person, equal = family_t(table())
    assert [(x.n, x.untested) for x in (nobody, one_person, equal)] == [
        (0, "fewer than two subjects have it"),
        (1, "fewer than two subjects have it"),
        (12, "all its values are equal"),
    ]
    assert {(x.test, x.p_holm) for x in (nobody, one_person, equal)} == {(None, None)}
    assert (one_person.mean, equal.mean) == pytest.approx((1, 0.1))
    assert np.isnan(nobody.mean)
    without = family_t(table()[:, :-3])
    assert [x.p_holm for x in without] == [x.p_holm for x in family_t(table())[:-3]]


def test_a_complete_column_has_the_bits_of_the_single_test_alone_or_among_others():
    values = np.random.default_rng(8).normal(0.3, 1, (40, 6))
    for column, one in zip(values.T, family_t(values), strict=True):
        assert one.test == one_sample_t(column)
        assert one.test == family_t(column[:, None])[0].test


@given(st.permutations(range(9)), st.integers(0, 1000))
def test_averages_of_a_person_do_not_depend_on_row_order(order: list[int], seed: int):
    labels = list("abcabcaba")
    values = np.random.default_rng(seed).normal(size=(9, 3))
    made = person_means(values, labels)
    again = person_means(values[order], [labels[i] for i in order])
    assert np.array_equal(made, again)
    for j in range(3):
        assert made[:, j] == pytest.approx(per_person(values[:, j], labels), rel=1e-12)


def records(values: Any, coverage: Any, labels: list[str], **more: Any) -> list[dict[str, Any]]:
    n = values.shape[1]
    given_names = [f"Brook {j}" for j in range(n)]
    return family_results(
        values, coverage, labels, NAMES, list(range(1, n + 1)), given_names, [[9] * n], **more
    )


def test_a_record_says_what_that_of_a_single_region_says():
    values = np.random.default_rng(5).normal(0.6, 1, (10, 2))
    labels = [label for label in LABELS[:5] for _ in range(2)]
    coverage = np.full(values.shape, 0.75)
    for j, record in enumerate(records(values, coverage, labels)):
        people = per_person(values[:, j], labels)
        single = fixed_region_result(people, NAMES, [9], [0.75]).as_dict()
        for field in ("n_subjects", "interval", "t", "p", "dz", "coverage", "mask_sizes", "p_kind"):
            assert record[field] == pytest.approx(single[field]), field
        assert (record["parcel"], record["parcel_name"]) == (j + 1, f"Brook {j}")
        assert record["p_holm"] >= record["p"]
        assert f"parcel Brook {j}: mean" in record["sentence"]
        assert "Holm-adjusted over the 2 parcels tested" in record["sentence"]


def test_a_map_that_covers_too_little_of_a_parcel_does_not_count_there():
    values = np.random.default_rng(5).normal(0.6, 1, (6, 2))
    coverage = np.ones(values.shape)
    coverage[[1, 4], 0] = [0.4, 0.6]
    (first, second) = records(values, coverage, LABELS[:6], min_coverage=0.6)
    kept = np.delete(values[:, 0], 1)
    assert (first["n_subjects"], second["n_subjects"]) == (5, 6)
    assert first["p"] == pytest.approx(stats.ttest_1samp(kept, 0).pvalue)
    assert (first["coverage"], second["coverage"]) == (0.6, 1)
    assert "1 of 6 subjects lack the parcel" in first["sentence"]
    # A subject with another map of the parcel is not lost.
    first, _ = records(values, coverage, [*"ab", "b", *"cde"], min_coverage=0.6)
    assert first["n_subjects"] == 5
    assert first["estimate"] == pytest.approx(kept.mean())


def test_an_untested_parcel_has_its_estimate_and_no_more():
    values = np.array([[1.0, 2.0], [np.nan, 3.0], [np.nan, 5.0]])
    coverage = np.where(np.isfinite(values), 1.0, 0.0)
    record, other = records(values, coverage, LABELS[:3])
    assert record["estimate"] == 1
    assert {record[k] for k in ("interval", "t", "p", "dz", "p_holm")} == {None}
    assert "no test, fewer than two subjects have it (n = 1 of 3" in record["sentence"]
    assert other["p_holm"] == other["p"]  # the only one of its family


# -- faults ------------------------------------------------------------------------------------


@pytest.mark.parametrize(
    ("data", "message"),
    [
        (np.full(GRID.shape, 1.5), r"not a label image \(.*atlas.nii\): expected whole numbers"),
        (np.zeros(GRID.shape), r"label image without labels \(.*atlas.nii\)"),
        (np.full(GRID.shape, 2**24 + 1, np.int32), "too large to be told apart"),
    ],
)
def test_what_is_no_label_image_is_refused(data: Any, message: str, tmp_path: Path):
    labels = saved(tmp_path / "atlas.nii", data)
    with pytest.raises(InputError, match=message):
        extracted(
            tmp_path / "run", label_files=labels, in_files=[saved(tmp_path / "m.nii", effects(0))]
        )


@pytest.mark.parametrize(
    ("inputs", "message"),
    [
        ({"parcels": [5, 6, 7]}, "parcels that cannot be read .*got 6, 7 not in it; choose among"),
        ({"parcels": [5, 5]}, "each once, got \\[5, 5\\]"),
        ({"labels": ["a"]}, "do not pair up: .*got 1 label images, 2 maps, 1 labels"),
        ({"label_files": 3}, "do not pair up: .*got 3 label images, 2 maps, 2 labels"),
        ({"in_files": OTHER}, "grids differ"),
    ],
)
def test_what_does_not_belong_together_is_refused(
    inputs: dict[str, Any], message: str, tmp_path: Path
):
    labels = saved(tmp_path / "atlas.nii", atlas(99))
    maps = [saved(tmp_path / f"{i}.nii", effects(i)) for i in range(2)]
    if "label_files" in inputs:
        inputs = {"label_files": [labels] * 3}
    if "in_files" in inputs:
        inputs = {"in_files": [maps[0], saved(tmp_path / "o.nii", effects(0, OTHER), OTHER)]}
    with pytest.raises(InputError, match=message):
        extracted(tmp_path / "run", **{"label_files": labels, "in_files": maps} | inputs)


def test_tables_that_do_not_belong_together_are_refused(tmp_path: Path):
    values = np.ones((3, 2))
    with pytest.raises(InputError, match=r"\(coverage\): expected 3 maps, 2 parcels"):
        records(values, np.ones((3, 1)), LABELS[:3])
    with pytest.raises(InputError, match=r"\(values\): expected 4 maps, 2 parcels"):
        records(values, values, LABELS[:4])
    (tmp_path / "no.npy").write_text("no table")
    inputs = {"labels": ["a"], "parcels": [1], "sizes": [[1]], "names": NAMES}
    node = FamilyTest(values_file="no.npy", coverage_file="no.npy", **inputs)
    with pytest.raises(InputError, match=r"not a table of values \(.*no.npy\)"):
        node.run(cwd=str(tmp_path))


def test_a_plan_reads_and_tests_with_one_least_coverage(tmp_path: Path):
    image = saved(tmp_path / "atlas.nii", atlas(99))
    plan = parcels("lanterns", LABELS, image, "the atlas of 1909", min_coverage=0.6)
    assert [plan.get_node(name).inputs.min_coverage for name in ("extract", "test")] == [0.6, 0.6]


# -- under the guard ---------------------------------------------------------------------------


@pytest.fixture
def study(tmp_path: Path) -> Study:
    """Eight subjects with a map each, an atlas of declared origin, and one nobody declared."""
    return plant(
        tmp_path / "study",
        {label: effects(i) for i, label in enumerate(LABELS)},
        GRID,
        {"atlas": atlas(99), "found": atlas(98)},
        [Origin("an atlas of 1909", ("atlas.nii",))],
    )


def family(maps: list[str], **inputs: Any) -> Workflow:
    graph = Workflow("w", base_dir="work")
    graph.config["execution"] = {
        "crashdump_dir": ".",
        "create_report": "false",
        "remove_unnecessary_outputs": "false",
    }
    read = Node(ExtractParcels(in_files=maps, labels=LABELS, **inputs), name="read")
    test = Node(FamilyTest(labels=LABELS, names=NAMES), name="test")
    tables = ("values_file", "coverage_file", "parcels", "sizes")
    graph.connect([(read, test, [(name, name) for name in tables])])
    return graph


class TestGuard:
    def test_a_declared_atlas_is_cleared(self, study: Study, maps: list[str]):
        labels = str(study.root / "atlas.nii")
        guard = GuardPlugin(study)
        nodes = {n.name: n for n in family(maps, label_files=labels).run(plugin=guard).nodes()}
        assert [(f.kind, f.verdict, f.level) for f in guard.findings] == [
            *[("extraction", "apart", "subject")] * 8,
            ("statistic", "apart", "subject"),
        ]
        record = json.loads(Path(nodes["test"].result.outputs.record_file).read_text())
        assert [record[key] for key in ("roi", "plan", "search")] == list(NAMES)
        assert [test["parcel_name"] for test in record["tests"]] == list(map(str, NUMBERS))
        for test in record["tests"]:
            values = [plain(labels, path, test["parcel"])[0] for path in maps]
            assert test["p"] == pytest.approx(stats.ttest_1samp(values, 0).pvalue, rel=1e-10)
        p = [test["p"] for test in record["tests"]]
        adjusted = multipletests(p, method="holm")[1]
        assert [test["p_holm"] for test in record["tests"]] == pytest.approx(adjusted, rel=1e-10)

    def test_names_come_from_a_table_that_needs_no_declaration(
        self, study: Study, maps: list[str], tmp_path: Path
    ):
        table = tmp_path / "atlas.tsv"
        table.write_text("index\tname\n40\tCinder\n5\tBrook\n77\tArbor\n")
        graph = family(maps, label_files=str(study.root / "atlas.nii"))
        graph.get_node("test").inputs.table_file = str(table)
        nodes = {node.name: node for node in graph.run(plugin=GuardPlugin(study)).nodes()}
        record = json.loads(Path(nodes["test"].result.outputs.record_file).read_text())
        names = [test["parcel_name"] for test in record["tests"]]
        assert names == ["2", "Brook", "9", "Cinder"]

    def test_labels_made_from_the_tested_data_are_refused(self, study: Study, maps: list[str]):
        graph = family(maps)
        choose = Node(ChooseMask(rule=Strongest(9)), name="choose")
        graph.connect(
            [(Node(GroupMap(in_files=maps), name="g"), choose, [("out_file", "in_file")])]
        )
        graph.connect(choose, "mask_file", graph.get_node("read"), "label_files")
        with pytest.raises(GuardRefused, match="before anything ran") as raised:
            graph.run(plugin=GuardPlugin(study))
        found = [(f.kind, f.verdict) for f in raised.value.findings]
        assert found == [*[("extraction", "leak")] * 8, ("statistic", "leak")]

    def test_labels_that_nobody_declared_are_refused(self, study: Study, maps: list[str]):
        graph = family(maps, label_files=str(study.root / "found.nii"))
        with pytest.raises(GuardRefused, match=r"nobody has declared what found\.nii") as raised:
            graph.run(plugin=GuardPlugin(study))
        assert {f.verdict for f in raised.value.findings} == {"unproven"}

    def test_cross_fitted_labels_have_no_t_test(self, study: Study, maps: list[str]):
        # Each meeting is apart; that the masks take turns shows in the marks of the file alone.
        graph = family(maps)
        procedure = Procedure(Threshold(p=0.05), LeaveOneOut())
        choose = ChooseByFold(in_files=maps, labels=LABELS, procedure=procedure)
        graph.connect(
            Node(choose, name="choose"), "row_masks", graph.get_node("read"), "label_files"
        )
        with pytest.raises(GuardRefused, match="the 8 values are cross-fitted") as raised:
            graph.run(plugin=GuardPlugin(study))
        assert [f.node for f in raised.value.findings] == ["w.test"]

    def test_values_from_nowhere_are_refused(self, study: Study, tmp_path: Path):
        np.save(tmp_path / "v.npy", np.ones((8, 1)))
        file = str(tmp_path / "v.npy")
        test = FamilyTest(labels=LABELS, names=NAMES, values_file=file, coverage_file=file)
        test.inputs.trait_set(parcels=[1], sizes=[[9]])
        graph = Workflow("w", base_dir="work")
        graph.add_nodes([Node(test, name="test")])
        with pytest.raises(GuardRefused, match=r"unproven: w\.test: nobody has declared"):
            graph.run(plugin=GuardPlugin(study))

    def test_without_the_guard_nothing_is_read(self, study: Study, maps: list[str]):
        labels = str(study.root / "atlas.nii")
        with pytest.raises(NodeExecutionError, match="this extraction has no clearance"):
            family(maps, label_files=labels).run(plugin="Linear")
        with pytest.raises(Refused, match="no clearance: run the workflow under the guard"):
            ExtractParcels(label_files=labels, in_files=maps, labels=LABELS).run()
        assert read_map(labels)[0].any()
