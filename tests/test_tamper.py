"""Files that are not what they are said to be: refused, or known for what they are."""

from __future__ import annotations

import ast
import os
import pickle
import shutil
from pathlib import Path
from typing import Any

import nibabel as nib
import numpy as np
import pytest
import sequester
from click.testing import CliRunner
from nipype import DataSink, MapNode, Node, SelectFiles, Workflow
from planting import a_grid, plant
from running import called, workflow
from sequester.nodes.errors import InputError, Refused
from sequester.nodes.images import write_map
from sequester.nodes.interfaces import Extract
from sequester.nodes.touch import Unit
from sequester.workflows.cli import main
from sequester.workflows.guard import GuardPlugin, GuardRefused
from sequester.workflows.study import Origin, Row, Study, read_table

SHAPE = (4, 4, 3)
GRID = a_grid(SHAPE, 2.0)
LABELS = ["01", "02", "03", "04", "05"]
CHART = Origin("a chart of moss", ("moss.nii",))
SAME = "def same(x):\n    return x\n"


pytestmark = pytest.mark.usefixtures("quiet_engine")


def effects(seed: int) -> Any:
    return np.random.default_rng(seed).standard_normal(SHAPE).astype(np.float32)


@pytest.fixture
def study(tmp_path: Path) -> Study:
    maps = {label: effects(i) for i, label in enumerate(LABELS)}
    moss = np.arange(48).reshape(SHAPE) < 9
    return plant(tmp_path, maps, GRID, {"moss": moss}, [CHART], prefix="")


def extraction(maps: list[str], mask: str) -> Workflow:
    made = workflow()
    read = Extract(in_files=maps, labels=LABELS[: len(maps)], mask_files=[mask])
    made.add_nodes([Node(read, "read")])
    return made


def replacing(maps: list[str], how: str) -> Workflow:
    """A workflow whose first step does something to the chart that the second reads in."""
    made = extraction(maps, str(Path("moss.nii").absolute()))
    body = (
        f"def act(x):\n    import os, shutil\n    chart = os.path.join({os.getcwd()!r}, 'mo' + "
        f"'ss.nii')\n{how}    return x\n"
    )
    made.connect(Node(called(body, x=maps), "act"), "out", made.get_node("read"), "in_files")
    return made


OVERWRITE = f"    open(chart, 'r+b').write(open(x[0], 'rb').read()[:{352 + 48}])\n"


@pytest.mark.parametrize(
    "how",
    [
        "    shutil.copyfile(x[0], chart)\n",
        "    os.replace(shutil.copy(x[0], chart + '.new'), chart)\n",
        "    os.remove(chart); os.symlink(x[0], chart)\n",
        f"    was = os.stat(chart)\n{OVERWRITE}"
        "    os.utime(chart, ns=(was.st_atime_ns, was.st_mtime_ns))\n",
        "    os.remove(chart)\n",
    ],
    ids=["copied over", "moved over", "made a link", "in place, its time set back", "removed"],
)
def test_a_mask_that_is_replaced_after_the_check(how, study, maps):
    with pytest.raises((Refused, InputError), match=r"moss\.nii"):
        replacing(maps, how).run(plugin=GuardPlugin(study))
    if Path("moss.nii").exists():  # or the node itself misses it
        assert not list(Path("work/w/read").glob("result*"))


def test_a_mask_that_is_replaced_after_it_was_read(study, maps):
    """On a cluster, the reader may start long after the look: the end is looked at too."""
    made = extraction(maps, str(Path("moss.nii").absolute()))
    late = called(
        f"def act(x):\n    import os, shutil\n    os.chdir({os.getcwd()!r})\n"
        "    return shutil.copy('0' + '1.nii', 'mo' + 'ss.nii')\n",
        x=None,
    )
    made.connect(made.get_node("read"), "values", Node(late, "late"), "x")
    with pytest.raises(Refused, match=r"moss\.nii was changed while the workflow ran"):
        made.run(plugin=GuardPlugin(study))


@pytest.mark.parametrize("when", ["between reading and running", "while it runs"])
def test_a_study_table_that_is_edited_after_it_was_read(when, study, maps):
    edit = "open('tab' + 'le.tsv', 'a').write('99.nii\\t99\\tbold\\n')"
    made = extraction(maps, str(Path("moss.nii").absolute()))
    if when == "while it runs":
        body = f"def act(x):\n    import os\n    os.chdir({os.getcwd()!r})\n    {edit}\n"
        made.add_nodes([Node(called(body, x=1), "act")])
    else:
        exec(edit)
    with pytest.raises(Refused, match=r"table\.tsv was changed after it was read"):
        made.run(plugin=GuardPlugin(study))
    Path("table.tsv").write_text(Path("table.tsv").read_text())
    again = read_table("table.tsv", origins=[CHART])
    extraction(maps, str(Path("moss.nii").absolute())).run(plugin=GuardPlugin(again))


LINKS = {"a copy": shutil.copyfile, "a hard link": os.link, "a symbolic link": os.symlink}


@pytest.mark.parametrize("kind", LINKS)
def test_one_file_under_two_units(kind, study, maps):
    """Held out under one name, it would choose under the other."""
    os.remove("03.nii")
    LINKS[kind](maps[0], "03.nii")
    with pytest.raises(InputError, match=r"identical files under two names.*01\.nii"):
        extraction(maps, str(Path("moss.nii").absolute())).run(plugin=GuardPlugin(study))


def test_a_copy_may_be_left_out_for_that_very_reason(maps):
    shutil.copyfile(maps[0], "03.nii")
    rows = [Row(f"{x}.nii", None, Unit(sub=x, suffix="bold")) for x in LABELS[:2]]
    third = Row("03.nii", None, Unit(sub="03", suffix="bold"), exclude_reason="copied from 01")
    study = Study(Path.cwd(), [*rows, third], [CHART])
    extraction(maps[:2], str(Path("moss.nii").absolute())).run(plugin=GuardPlugin(study))


@pytest.mark.parametrize("kind", LINKS)
def test_a_listed_map_under_the_name_of_an_origin(kind, maps):
    LINKS[kind](maps[0], "region.nii")
    study = read_table("table.tsv", origins=[Origin("from elsewhere", ("region.nii",))])
    with pytest.raises((InputError, GuardRefused)) as told:
        extraction(maps, str(Path("region.nii").absolute())).run(plugin=GuardPlugin(study))
    assert "region.nii" in str(told.value)
    assert not Path("work/w/read").exists()


@pytest.mark.parametrize("kind", LINKS)
def test_a_listed_map_under_a_name_that_nobody_declared(kind, study, maps):
    LINKS[kind](maps[0], "other.nii")
    with pytest.raises(GuardRefused, match=r"before anything ran"):
        extraction(maps[:1], str(Path("other.nii").absolute())).run(plugin=GuardPlugin(study))


def test_volumes_of_one_file_belong_to_several_units(maps):
    stack = np.stack([effects(i) for i in range(5)], axis=3)
    nib.Nifti1Image(stack, GRID.affine).to_filename("four.nii")
    path = str(Path("four.nii").absolute())
    rows = [Row("four.nii", i, Unit(sub=label, suffix="bold")) for i, label in enumerate(LABELS)]
    study = Study(Path.cwd(), rows)
    made = workflow()
    # A step of one's own takes volume 2 and says so to nobody: it may hold any of them.
    body = (
        "def part(x):\n    import os, nibabel as nib\n"
        "    nib.load(x).slicer[..., 2].to_filename('part.nii')\n"
        "    return os.path.abspath('part.nii')\n"
    )
    read = Node(Extract(in_files=maps[:1], labels=LABELS[:1]), "read")
    made.connect(Node(called(body, x=path), "part"), "out", read, "mask_files")
    three = Study(Path.cwd(), [*rows, Row("01.nii", None, Unit(sub="01", suffix="bold"))])
    with pytest.raises(GuardRefused) as told:
        made.run(plugin=GuardPlugin(three))
    (finding,) = told.value.findings
    assert three.table.describe(finding.shared) == "sub-01_bold"
    assert study.touch_of(path, 2).values == study.table.bits([rows[2].unit])
    assert study.touch_of(path).values == study.table.everything


@pytest.mark.parametrize("names", [("01.nii", "01.NII"), ("maps/a.nii", "Maps/a.nii")])
def test_names_that_differ_in_case_only(names, maps):
    for i, name in enumerate(names):
        Path(name).parent.mkdir(exist_ok=True)
        write_map(Path(name), effects(i), GRID) if name.endswith("nii") else None
    rows = [Row(n, None, Unit(sub=f"0{i}", suffix="bold")) for i, n in enumerate(names)]
    study = Study(Path.cwd(), rows, [CHART])
    with pytest.raises(InputError, match="two file names that differ in case only"):
        extraction(maps[:1], str(Path("moss.nii").absolute())).run(plugin=GuardPlugin(study))


def test_a_file_that_goes_through_a_sink_to_a_grabber(study, maps):
    """No edge leads from the sink to the grabber; what lies there is nobody's, twice."""

    def made() -> Workflow:
        graph = workflow()
        step = "def shift(x):\n    import os, nibabel as nib\n    image = nib.load(x)\n"
        step += "    nib.Nifti1Image(image.get_fdata() + 1, image.affine).to_filename('a.nii')\n"
        step += "    return os.path.abspath('a.nii')\n"
        shift, sink = Node(called(step, x=maps[0]), "shift"), Node(DataSink(), "sink")
        sink.inputs.base_directory = str(Path("sunk").absolute())
        graph.connect(shift, "out", sink, "there")
        grab = Node(SelectFiles({"mask": "sunk/there/*.nii"}), "grab")
        grab.inputs.base_directory = str(Path.cwd())
        read = Node(Extract(in_files=maps[:1], labels=LABELS[:1]), "read")
        graph.connect(grab, "mask", read, "mask_files")
        return graph

    for there in (False, True):
        if there:
            Path("sunk/there").mkdir(parents=True)
            write_map(Path("sunk/there/a.nii"), effects(0) + 1, GRID)
        with pytest.raises(GuardRefused, match="refused before anything ran") as told:
            made().run(plugin=GuardPlugin(study))
        assert [(f.node, f.verdict) for f in told.value.findings] == [("w.read", "unproven")]
        assert Path("sunk").exists() == there


class Crafted:
    def __reduce__(self) -> tuple[Any, ...]:
        return (open, (str(Path("trace").absolute()), "w"))


def test_a_crafted_result_is_not_read_before_the_run(study, maps):
    """The engine executes what it reads from its working folder; the first gate reads nothing."""
    made = workflow()
    mask = Node(called(SAME, x=maps[0]), "mask")
    read = Node(Extract(in_files=maps[:1], labels=LABELS[:1]), "read")
    made.connect(mask, "out", read, "mask_files")
    for name in ("mask", "read"):
        folder = Path("work/w", name)
        folder.mkdir(parents=True)
        for file in (f"result_{name}.pklz", "_inputs.pklz", "_node.pklz"):
            (folder / file).write_bytes(pickle.dumps(Crafted()))
    with pytest.raises(GuardRefused, match="before anything ran"):
        made.run(plugin=GuardPlugin(study))
    assert not Path("trace").exists()


def test_a_run_of_a_study_starts_with_an_empty_working_folder(maps):
    Path("STUDY.toml").write_text(
        '[study]\nname = "moss"\ntable = "table.tsv"\n[[roi]]\nname = "Chart"\n'
        'plan = "a-priori"\nregion = { mask = "moss.nii", origin = "a chart of moss" }\n'
    )
    Path("places").write_text("")
    command = ["run", "STUDY.toml", "-q", "--json", "--work", "kept"]
    assert CliRunner().invoke(main, command).exit_code == 0
    # The very folders and names the engine will look for, where it works without --work.
    shutil.copytree("kept", ".results.work")
    shutil.rmtree("results")
    for file in Path(".results.work").rglob("*.pklz"):
        file.write_bytes(pickle.dumps(Crafted()))
    assert CliRunner().invoke(main, command[:-2]).exit_code == 0
    assert not Path("trace").exists()


def test_our_code_reads_no_pickle():
    root = Path(sequester.nodes.__file__).parent.parent
    for path in [*root.glob("nodes/**/*.py"), *root.glob("workflows/**/*.py")]:
        for item in ast.walk(ast.parse(path.read_text())):
            if isinstance(item, ast.Import | ast.ImportFrom):
                names = {alias.name.split(".")[0] for alias in item.names}
                names.add((getattr(item, "module", None) or "").split(".")[0])
                assert not names & {"pickle", "shelve", "dill", "marshal", "joblib"}, path
            if isinstance(item, ast.Name | ast.Attribute):
                name = item.id if isinstance(item, ast.Name) else item.attr
                assert name not in ("loadpkl", "load_resultfile", "loadcrash"), path


@pytest.mark.parametrize("each", [False, True], ids=["a node", "a MapNode"])
def test_a_cached_result_of_another_subject_is_made_again(each, study, maps):
    """By default the engine knows a file by size and time: these two are one file to it."""
    for path in maps:
        os.utime(path, ns=(0, 0))
    body = (
        "def mean(x):\n    import nibabel as nib\n"
        "    return float(nib.load(x).get_fdata().mean())\n"
    )

    def means(*files: str) -> list[float]:
        graph = workflow()
        step = called(body, x=None)
        node = MapNode(step, iterfield=["x"], name="mean") if each else Node(step, "mean")
        node.inputs.x = list(files) if each else files[0]
        graph.add_nodes([node])
        (ran,) = graph.run(plugin=GuardPlugin(study)).nodes()
        return ran.result.outputs.out if each else [ran.result.outputs.out]

    first = means(maps[0], maps[1])
    file = next(Path("work/w/mean").rglob("result_*.pklz"))
    before = file.stat().st_mtime_ns
    assert means(maps[0], maps[1]) == first
    assert file.stat().st_mtime_ns == before  # what is right is kept
    assert means(maps[1], maps[0])[0] == pytest.approx(effects(1).mean())
