"""methods.txt says, for every key of the study file, what the numbers depend on."""

from __future__ import annotations

import re
from pathlib import Path

import numpy as np
import pytest
from planting import a_grid
from sequester.nodes.images import write_map
from sequester.workflows import rois, settings
from sequester.workflows.ledger import Ledger
from sequester.workflows.report.folder import read_folder
from sequester.workflows.report.methods import methods_text
from sequester.workflows.report.page import write_report
from sequester.workflows.run import run_study
from sequester.workflows.settings import read_settings

SHAPE = (5, 5, 4)
SUBS = tuple(f"{i:02}" for i in range(1, 9))
HEAD = """[study]
name = "lanterns"
table = "table.tsv"
seed = 7
[data]
select = { contrast = "amber" }
"""
WALK = 'origin = "a walk"'
STRONG, MEAN = (
    'rule = { kind = "strongest", k = 9 }',
    'rule = { kind = "strongest", k = 9, map = "mean" }',
)
CLUSTER = 'rule = { kind = "cluster", p = 0.2 }'
ELSEWHERE = 'choose_on = { contrast = "teal" }'
CERTIFICATE = (
    'certificate = { design = "design.tsv", noise = "NOISE", chosen = { amber = 1, teal = 1 }, '
    "tested = { amber = 1, teal = -1 }, between = [[1, 0], [0, 1]], source = 'the gardener' }"
)
# Of every plan a region as plain as can be; "9 flips" keep it short.
PLAIN = {
    "Given": ("a-priori", f'region = {{ mask = "bed.nii.gz", {WALK} }}'),
    "Loso": ("leave-one-subject-out", f"flips = 9\n{STRONG}"),
    "Kfold": ("k-fold", f"flips = 9\n{CLUSTER}"),
    "Half": ("split-half", f"flips = 9\n{STRONG}"),
    "Beds": ("given-folds", f'flips = 9\nfold_column = "bed"\n{STRONG}'),
    "Runs": ("leave-one-run-out", MEAN),
    "Halves": ("split-half-runs", MEAN),
    "Own": ("localizer", f'select = {{ run = "1" }}\nchoose_on = {{ run = "2" }}\n{STRONG}'),
    "Cross": (
        "orthogonal-contrast",
        f"{ELSEWHERE}\n{STRONG}\n" + CERTIFICATE.replace("NOISE", "white"),
    ),
    "Score": ("k-fold", f'flips = 9\nscore = "skill"\n{STRONG}'),
    "Groups": (
        "k-fold",
        'flips = 9\nfolds = 2\ncompare = { column = "group", first = "day", second = "night" }\n'
        + STRONG,
    ),
    "Look": ("exploratory", CLUSTER),
}
SAME = 'mask_of = "group"\nclaim = "these-subjects"'
ATLAS = f'atlas = "beds.nii.gz", {WALK}'
# Key by key: the plain region, what is put in the place of what ("" for more), and the words.
KEYS: dict[str, tuple[str, str, str, str]] = {
    "plan": ("Loso", "", "", "leaving out one subject at a time (8 folds)"),
    "value": ("Given", "", 'value = "median"', "the median of the map over the voxels"),
    "value component": ("Runs", "", 'value = "component"', "first principal component"),
    "select": ("Given", "", 'select = { group = "day" }', "contrast amber, run 1 + 2, group day"),
    "minus": (
        "Given",
        "",
        'minus = { contrast = "teal" }',
        "the map of contrast teal, made in the same way, was subtracted",
    ),
    "sensitivity": (
        "Kfold",
        "",
        "sensitivity = { p = [0.1, 0.3], folds = [2] }",
        "the same was done with p 0.1 or 0.3 and folds 2",
    ),
    "search": (
        "Loso",
        "",
        f'search = {{ mask = "bed.nii.gz", {WALK} }}',
        "; bed (source: a walk) for Key6",
    ),
    "region": (
        "Given",
        'mask = "bed.nii.gz"',
        "centre = [0, 0, 0], radius = 3",
        "sphere of 3 mm at (0, 0, 0)",
    ),
    "origin": ("Given", "a walk", "a map in the hut", "(source: a map in the hut)"),
    "erode": (
        "Given",
        'mask = "bed.nii.gz"',
        'mask = "bed.nii.gz", erode = 0.5',
        "bed, eroded by 0.5 mm",
    ),
    "regrid": (
        "Given",
        'mask = "bed.nii.gz"',
        'mask = "bed.nii.gz", regrid = true',
        "brought to the grid of the maps, voxels covered by half or more",
    ),
    "each_label": (
        "Given",
        f'region = {{ mask = "bed.nii.gz", {WALK} }}',
        f"each_label = true\nregion = {{ {ATLAS} }}",
        "labels of",
    ),
    "tail": ("Loso", "", 'tail = "negative"', "the 9 voxels with the lowest group t"),
    "on_empty": ("Kfold", "", 'on_empty = "stop"', "Where the rule finds nothing, the run ends."),
    "k": ("Kfold", "", 'on_empty = "strongest"\nk = 4', "the 4 strongest voxels stand in"),
    "flips": ("Loso", "flips = 9", "flips = 11", "11 random flips"),
    "interval": ("Loso", "", 'interval = "jackknife"', "conservative: the delete-one jackknife"),
    "interval of folds": ("Half", "", 'interval = "flips"', "95 % quantile of |t|"),
    "choose_on": (
        "Loso",
        "",
        ELSEWHERE,
        "The maps that choose are of contrast teal, run 1 + 2: runs were averaged with",
    ),
    "folds": ("Kfold", "", "folds = 4", "(4 folds, dealt at random by the seed 7)"),
    "stratify": ("Half", "", 'stratify = "group"', "spread evenly by group"),
    "fold_column": ("Beds", '"bed"', '"plot"', "with folds as in column plot of the study table"),
    "halves": ("Halves", "", 'halves = "first-second"', "(the first and the last)"),
    "mask_of": ("Own", "", SAME, "as one region for all, on the group map of other data"),
    "claim": ("Own", "", SAME, "speaks of these subjects only, as was declared."),
    "claim_reason": (
        "Own",
        "",
        SAME + '\nclaim_reason = "they are all"',
        "as was declared, because: they are all.",
    ),
    "certificate": (
        "Cross",
        '"white"',
        '"ar1", rho = 0',
        "ar1 noise, rho = 0, ordinary least squares",
    ),
    "compare": (
        "Groups",
        'first = "day", second = "night"',
        'first = "night", second = "day"',
        "values of night and day (column group; 8 subjects)",
    ),
    "score": ("Score", '"skill"', '"motion"', "were correlated with motion."),
    "covariates": (
        "Score",
        "",
        'covariates = ["motion"]',
        "correlated with skill, given motion (Freedman & Lane",
    ),
    "reliability": (
        "Score",
        "",
        "reliability = { values = 0.8, score = 0.7 }",
        "(0.8 of the values, 0.7 of the score)",
    ),
    "rule p": ("Kfold", "p = 0.2", "p = 0.3", "voxels with p < 0.3"),
    "rule height": ("Kfold", "p = 0.2", "height = 1.5", "voxels with t > 1.5"),
    "rule control": (
        "Kfold",
        "p = 0.2",
        'control = "bonferroni"',
        "t above Bonferroni's threshold",
    ),
    "rule level": (
        "Kfold",
        "p = 0.2",
        'control = "bonferroni", level = 0.2',
        "any false voxel at most 0.2",
    ),
    "rule flips": ("Kfold", "p = 0.2", 'control = "max-t", flips = 24', "(up to 24 sign flips)"),
    "rule extent": (
        "Kfold",
        "p = 0.2",
        'p = 0.2, extent = "max-cluster", flips = 24',
        "any false cluster at most 0.05",
    ),
    "rule connectivity": ("Kfold", "p = 0.2", "p = 0.2, connectivity = 6", "connectivity 6"),
    "rule min_size": ("Kfold", "p = 0.2", "p = 0.2, min_size = 2", "at least 2 voxels"),
    "rule pick": (
        "Kfold",
        "p = 0.2",
        'p = 0.2, pick = "peak"',
        "the cluster with the highest peak",
    ),
    "rule near": (
        "Kfold",
        "p = 0.2",
        'p = 0.2, pick = "nearest", near = [1, 2, 3]',
        "nearest to (1, 2, 3) mm",
    ),
    "rule k": ("Loso", "k = 9", "k = 8", "the 8 voxels"),
    "rule fraction": ("Loso", "k = 9", "fraction = 0.1", "the 10 % of the voxels"),
    "rule map": ("Loso", "k = 9", 'k = 9, map = "mean"', "the highest group mean"),
    "rule radius": (
        "Loso",
        '"strongest", k = 9',
        '"peak-sphere", radius = 2',
        "within 2 mm of the one",
    ),
    "rule of a look": ("Look", "p = 0.2", "p = 0.3", "voxels with p < 0.3"),
    "rule of own runs": (
        "Runs",
        "k = 9",
        "k = 8",
        "the 8 voxels with the highest mean over the subject's other runs",
    ),
    "rule of own maps": (
        "Own",
        '"strongest", k = 9',
        '"threshold", height = 0.4',
        "all voxels with a value of the subject's own localizer map > 0.4",
    ),
}
# What a number does not depend on: what is asked of the guard, names, and the one test there is.
NO_NUMBER = {"name", "test", "fwhm"}
DATA: dict[str, tuple[str, str, str]] = {
    "select": ('"amber"', '"teal"', "are of contrast teal, run 1 + 2"),
    "quality": (
        '"amber" }',
        '"amber", motion = ["1", "2", "3", "4", "5"] }\nquality = ["motion"]',
        "motion 1, 2, 3, 4 or 5: runs were averaged with equal weights. Selection by motion is by "
        "the quality",
    ),
    "minus": (
        "",
        'minus = { contrast = "teal" }',
        "contrast teal, made in the same way, was subtracted",
    ),
    "baseline": (
        "",
        'baseline = { contrast = "base" }',
        "was put in percent of the map of contrast base",
    ),
    "null_value": ("", "null_value = 0.5", "0.5, which stands for no effect, was subtracted"),
    "run_weights": (
        "",
        'run_weights = "variance"',
        "averaged with weights of 1 / variance at each voxel",
    ),
    "grids": ("", 'grids = "own"', "maps are on a grid of their own"),
    "zeros_are_missing": ("", "zeros_are_missing = false", "zeros are values"),
    "min_fraction": (
        "",
        "min_fraction = 0.5",
        "where 50 % or more of the maps that choose have data",
    ),
    "min_coverage": ("", "min_coverage = 0.4", "have data in 40 % of its region or more"),
    "seed": ("seed = 7", "seed = 8", "by the seed 8"),
    "exclude_reason": ("table.tsv", "fewer.tsv", "Left out were sub-08"),
    "exchange": (
        "table.tsv",
        "pairs.tsv",
        "8 subjects count as 7: those who belong together were held out",
    ),
}
COMPARED = {
    "difference": ("Loso minus Half was tested within subjects", ""),
    "equivalence": (
        "equivalence with zero, within 0.3 either way (90 % interval)",
        "smallest = 0.3",
    ),
    "anova": ("Whether Loso and Half differ was tested within subjects", ""),
}


@pytest.fixture(scope="module")
def hill(tmp_path_factory) -> Path:
    """Eight gardeners, three contrasts, two runs."""
    root, rng = tmp_path_factory.mktemp("hill"), np.random.default_rng(4)
    head = "path\tsub\tsuffix\tcontrast\trun\tvariance\tgroup\tbed\tplot\tskill\tmotion"
    lines: dict[str, list[str]] = {sub: [] for sub in SUBS}
    for i, sub in enumerate(SUBS):
        for contrast in ("amber", "teal", "base"):
            for run in ("1", "2"):
                name = f"sub-{sub}_run-{run}_{contrast}.nii.gz"
                data = rng.normal(0.6, 1, SHAPE) + 9 * (contrast == "base")
                write_map(root / name, data.astype(np.float32), a_grid(SHAPE))
                spread = rng.uniform(1, 2, SHAPE).astype(np.float32)
                write_map(root / f"var_{name}", spread, a_grid(SHAPE))
                row = (name, sub, "bold", contrast, run, f"var_{name}", ("day", "night")[i % 2],
                       "abc"[i % 3], "ab"[i // 4], str(3 * i % 8), str(i + 1))  # fmt: skip
                lines[sub].append("\t".join(row))
    for table, more, of in (("table", "", {}), ("fewer", "\texclude_reason", {"08": "asleep"}),
                            ("pairs", "\texchange", {"07": "hut", "08": "hut"})):  # fmt: skip
        rows = [
            f"{row}\t{of.get(sub, 'n/a')}" if more else row for sub in SUBS for row in lines[sub]
        ]
        (root / f"{table}.tsv").write_text("\n".join([head + more, *rows]) + "\n")
    bed = np.zeros(SHAPE, np.uint8)
    bed[:3, :3, :3] = 1
    write_map(root / "bed.nii.gz", bed, a_grid(SHAPE))
    write_map(root / "beds.nii.gz", bed + np.uint8(1), a_grid(SHAPE))
    (root / "design.tsv").write_text("amber\tteal\n" + "1\t0\n0\t1\n" * 6)
    return root


def changed(text: str, old: str, new: str) -> str:
    """A text with one thing in the place of another, or more at its end."""
    assert old in text
    return text.replace(old, new, 1) if old else f"{text}\n{new}"


def roi(name: str, plan: str, keys: str) -> str:
    return f'\n[[roi]]\nname = "{name}"\nplan = "{plan}"\n{keys}\n'


def done(root: Path, text: str, name: str = "STUDY") -> Path:
    (root / f"{name}.toml").write_text(text)
    return run_study(read_settings(root / f"{name}.toml"), record=False).output


def said(folder: Path) -> list[str]:
    """The paragraphs, each in one line."""
    return [" ".join(part.split()) for part in methods_text(read_folder(folder)).split("\n\n")]


@pytest.fixture(scope="module")
def regions(hill) -> list[str]:
    """The paragraphs of a study with the plain regions and one for every key."""
    text = HEAD + "".join(roi(name, *keys) for name, keys in PLAIN.items())
    for i, (name, old, new, _) in enumerate(KEYS.values()):
        plan, keys = PLAIN[name]
        text += roi(f"Key{i}", plan, changed(keys, old, new))
    return said(done(hill, text))


def of(paragraphs: list[str], name: str) -> str:
    (found,) = (one for one in paragraphs if re.search(rf"^The .*\b{name}\b.*? (was|were) ", one))
    return found


@pytest.mark.parametrize("key", KEYS)
def test_a_key_of_a_region_changes_its_methods_and_is_said(regions, key):
    plain, words = KEYS[key][0], KEYS[key][-1]
    mine = of(regions, f"Key{list(KEYS).index(key)}")
    assert words in mine
    # Alike regions stand in one paragraph: another setting is another paragraph.
    assert (of(regions, plain) == mine) == (
        key in ("plan", "origin", "region", "search", "erode", "regrid")
    )


def test_no_key_is_forgotten():
    stated = {*rois._ROI_KEYS, *(k for keys in rois._PLAN_KEYS.values() for k in keys), "rule"}
    ruled = {f"rule {key}" for keys in rois._RULES.values() for key in keys}
    assert (stated | ruled) - KEYS.keys() - NO_NUMBER - {"rule"} == set()
    assert settings._KEYS["data"] - DATA.keys() - NO_NUMBER == set()


@pytest.fixture(scope="module")
def plain(hill) -> list[str]:
    return said(done(hill, HEAD + roi("Given", *PLAIN["Given"]) + roi("Kfold", *PLAIN["Kfold"])))


@pytest.mark.parametrize("key", DATA)
def test_a_key_of_the_data_changes_the_methods_and_is_said(hill, plain, key):
    old, new, words = DATA[key]
    text = changed(HEAD, old, new) + roi("Given", *PLAIN["Given"])
    text += roi("Kfold", *PLAIN["Kfold"]) if key != "grids" else ""
    mine = said(done(hill, text))
    assert words in " ".join(mine) and words not in " ".join(plain)


def test_who_counts_as_one_is_said_of_labels_too_and_not_of_those_who_lack_one(hill):
    family = roi("Parts", "a-priori", f"each_label = true\nregion = {{ {ATLAS} }}")
    for table, words in (("pairs", True), ("table", False), ("fewer", False)):
        text = " ".join(said(done(hill, HEAD.replace("table.tsv", f"{table}.tsv") + family)))
        assert ("8 subjects count as 7: those who belong together had their" in text) == words
        assert ("subjects count as" in text) == words


@pytest.mark.parametrize("kind", COMPARED)
def test_how_regions_were_compared_is_said(hill, kind):
    words, more = COMPARED[kind]
    text = HEAD + roi("Loso", *PLAIN["Loso"]) + roi("Half", *PLAIN["Half"])
    text += f'[[comparison]]\nname = "Both"\nkind = "{kind}"\nrois = ["Loso", "Half"]\n{more}\n'
    last = " ".join(said(done(hill, text)))
    assert words in last and "(Both; p by " in last


def test_own_masks_name_the_map_that_their_rule_reads(hill):
    rules = {
        "Own": "the 9 voxels with the highest value of the subject's own localizer map",
        "Runs": "the 9 voxels with the highest mean over the subject's other runs",
    }
    study = hill / "own" / "STUDY.toml"
    study.parent.mkdir()
    keys = "".join(roi(name, *PLAIN[name]) for name in rules)
    study.write_text(HEAD.replace("table.tsv", "../table.tsv") + keys)
    done = run_study(read_settings(study))
    write_report(done.output)
    page = (done.output / "report.html").read_text().replace("&#39;", "'")
    ledger = Ledger(study.with_name("STUDY.ledger.jsonl")).sound()
    looks = {one.body["roi"]: one.body["parameters"]["rule"] for one in ledger.of_kind("look")}
    assert looks == rules
    for row in done.tests:
        assert row["rule"].endswith(f": {rules[row['roi']]}")
        assert f"Rule: {rules[row['roi']]}." in row["sentence"]
        assert f"<dd>{row['rule']}</dd>" in page
    assert "group" not in " ".join(
        map(str, [*looks.values(), *(row["rule"] for row in done.tests)])
    )
    assert "<dd>contrast amber, run 1; " not in page and "<dd>contrast amber, run 1</dd>" in page


def test_the_page_says_what_was_done_to_the_maps(hill, tmp_path):
    text = changed(HEAD, "", 'minus = { contrast = "teal" }\nnull_value = 0.25')
    folder = done(hill, text + roi("Given", *PLAIN["Given"]))
    page = write_report(folder).read_text()
    maps = "contrast amber, run 1 + 2, minus contrast teal, minus 0.25"
    assert f"<dd>{maps}; runs were averaged with equal weights</dd>" in page
    assert f"fixed beforehand? 8\N{NO-BREAK SPACE}subjects; {maps}." in page
