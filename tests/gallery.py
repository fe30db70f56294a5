"""Eighty small pipelines: ordinary ones that are right, and ones that are subtly wrong.

Each is a function from a garden of real files to a workflow; its docstring is the story. Whether
the guard clears or refuses it is tested, and told in docs/refusals.md, by test_refusals.py.
"""

from __future__ import annotations

import os
from collections.abc import Callable
from dataclasses import dataclass
from pathlib import Path
from typing import TypedDict, Unpack

from gallery_parts import (
    AGE,
    BANK,
    MOOD,
    NAMES,
    SUBS,
    Garden,
    OwnFolds,
    average,
    best_parcels,
    best_size,
    by_fold,
    called_by,
    centred,
    copied,
    correlating,
    empty,
    extract,
    first_half,
    fixed_test,
    flip_test,
    foreign,
    going_with,
    mean_of,
    minus,
    motion_of,
    neighbour,
    own_test,
    peak_of,
    peak_of_first,
    read_and_test,
    reading,
    realigned,
    response_of,
    reversed_list,
    scaled,
    second_half,
    strongest,
    with_age,
    with_bank,
)
from nipype import (
    DataGrabber,
    Function,
    IdentityInterface,
    JoinNode,
    MapNode,
    Merge,
    Node,
    Workflow,
)
from sequester import contract
from sequester.nodes.design import regression
from sequester.nodes.folds import KFold, LeaveOneOut
from sequester.nodes.interfaces import (
    ChooseByFold,
    ChooseMask,
    ChooseWithin,
    CombineMasks,
    Extract,
    ExtractParcels,
    FamilyTest,
    FlipTest,
    GivenMask,
    GroupMap,
    KeepSubjects,
    SphereMask,
    SubjectMaps,
)
from sequester.nodes.masks import Strongest
from sequester.nodes.models import Score
from sequester.nodes.orthogonality import Certificate, Condition
from sequester.nodes.procedure import Procedure
from sequester.nodes.rules import Statistic, each
from sequester.nodes.subjects import Keep
from sequester.nodes.touch import Unit
from sequester.workflows.around import around_folds
from sequester.workflows.plans import localizer, own_masks
from sequester.workflows.study import Origin

Build = Callable[[Garden], Workflow]


@dataclass(frozen=True)
class Case:
    """One pipeline.

    Parameters
    ----------
    title : str
    build : callable
        Its docstring is the story.
    said : str
        Words of the refusal; "" for a pipeline that is cleared.
    exchange, left_out : dict
        What the study table says of some subjects.
    """

    title: str
    build: Build
    said: str = ""
    exchange: tuple[tuple[str, str], ...] = ()
    left_out: tuple[tuple[str, str], ...] = ()

    @property
    def story(self) -> str:
        """One sentence or two."""
        return " ".join((self.build.__doc__ or "").split())

    def garden(self, root: Path) -> Garden:
        """Its garden."""
        return Garden(root, dict(self.exchange), dict(self.left_out))


class Told(TypedDict, total=False):
    """What the study table says of some subjects."""

    exchange: tuple[tuple[str, str], ...]
    left_out: tuple[tuple[str, str], ...]


RIGHT: list[Case] = []
WRONG: list[Case] = []  # the graph shows it
HIDDEN: list[Case] = []  # only the run shows it


def right(title: str, **told: Unpack[Told]) -> Callable[[Build], Build]:
    """A pipeline that the guard has to clear."""
    return _into(RIGHT, title, "", told)


def wrong(title: str, said: str, **told: Unpack[Told]) -> Callable[[Build], Build]:
    """A pipeline that the guard has to refuse before it runs, in these words."""
    return _into(WRONG, title, said, told)


def hidden(title: str, said: str, **told: Unpack[Told]) -> Callable[[Build], Build]:
    """A pipeline that the guard has to refuse while it runs, in these words."""
    return _into(HIDDEN, title, said, told)


def _into(cases: list[Case], title: str, said: str, told: Told) -> Callable[[Build], Build]:
    def add(build: Build) -> Build:
        cases.append(Case(title, build, said, **told))
        return build

    return add


PLAIN = Procedure(Strongest(6))
BLANK = (("02", "kin"), ("05", "kin"))


def atlas_test(garden: Garden, scan: str = "lanterns1") -> Workflow:
    """A region from the atlas, read in everybody and tested."""
    region = Node(GivenMask(in_file=garden.outside("atlas"), reference=garden.of(scan)[0]), "given")
    return read_and_test(empty(), region, "mask_file", extract(garden.of(scan)), fixed_test())


def group_then_test(
    choosing: list[str], tested: list[str], read: Node | None = None, test: Node | None = None
) -> Workflow:
    """A group map's strongest voxels, read and tested."""
    graph = empty()
    group, region = foreign(average, in_files=choosing), foreign(strongest)
    graph.connect(group, "out", region, "in_file")
    return read_and_test(graph, region, "out", read or extract(tested), test or fixed_test())


def chosen_by_age(garden: Garden, scan: str) -> tuple[Workflow, Node]:
    """A foreign map of the correlation with age in everybody, and its strongest voxels."""
    graph = empty()
    scores = foreign(going_with, in_files=garden.of(scan), scores=list(AGE))
    region = foreign(strongest)
    graph.connect(scores, "out", region, "in_file")
    return graph, region


def folds() -> Node:
    """Masks chosen fold by fold, on maps that an edge brings."""
    return Node(ChooseByFold(labels=list(SUBS), procedure=PLAIN), "choose")


def flips() -> Node:
    """The whole-procedure test, on maps that an edge brings."""
    test = FlipTest(labels=list(SUBS), procedure=PLAIN, names=NAMES, n_flips=19)
    return Node(test, "test")


def planned(plan: Workflow, **inputs: list[str]) -> Workflow:
    """A ready-made plan with its maps."""
    plan.base_dir = "work"
    plan.config["execution"] = empty().config["execution"]
    plan.inputs.inputnode.trait_set(**inputs)
    return plan


def kept_and_tested(graph: Workflow, garden: Garden, keep: Node) -> Workflow:
    """Those who are kept, read in the atlas and tested."""
    reference = garden.of("lanterns1")[0]
    region = Node(GivenMask(in_file=garden.outside("atlas"), reference=reference), "given")
    read, test = Node(Extract(), "extract"), fixed_test()
    fields = [("out_files", "in_files"), ("out_labels", "labels")]
    graph.connect([(keep, read, fields), (keep, test, [("out_labels", "labels")])])
    return read_and_test(graph, region, "mask_file", read, test)


def kept_by_response(garden: Garden, scan: str) -> Workflow:
    """Gardeners with a response in a scan, tested with lanterns."""
    graph, maps = empty(), garden.of("lanterns1")
    keep = Node(KeepSubjects(in_files=maps, labels=list(SUBS), keep=Keep(at_least=0.5)), "keep")
    responses = foreign(response_of, over=["in_file"], in_file=garden.of(scan))
    graph.connect(responses, "out", keep, "measures")
    return kept_and_tested(graph, garden, keep)


def stored(garden: Garden) -> list[str]:
    """The first runs moved to a store, with links in their place; the files in the store."""
    store = garden.root.parent / "store"
    store.mkdir(exist_ok=True)
    for path in garden.of("lanterns1"):
        if not os.path.islink(path):
            os.replace(path, store / Path(path).name)
            os.symlink(store / Path(path).name, path)
    garden.declare()
    return [os.path.realpath(path) for path in garden.of("lanterns1")]


# Of two contrasts whose errors are uncorrelated, within a run and between gardeners.
UNRELATED = Certificate(
    "amber + teal", "amber - teal", (Condition("run", 0.0), Condition("subject", 0.0)), ()
)


# -- right -------------------------------------------------------------------------------------


@right("A declared atlas")
def _(garden: Garden) -> Workflow:
    """Arbor is a label of an atlas of 1909 that was declared before the maps were looked at."""
    return atlas_test(garden)


@right("Leave one subject out, flipped as a whole")
def _(garden: Garden) -> Workflow:
    """Every gardener's region is chosen on the others, and the test repeats all of it."""
    maps = garden.of("lanterns1")
    choose, test = by_fold(maps, PLAIN), flip_test(maps, PLAIN)
    return read_and_test(empty(), choose, "row_masks", extract(maps), test)


@right("Three folds")
def _(garden: Garden) -> Workflow:
    """The same with three folds of two gardeners."""
    maps, folds = garden.of("lanterns1"), Procedure(Strongest(6), KFold(3))
    choose, test = by_fold(maps, folds), flip_test(maps, folds)
    return read_and_test(empty(), choose, "row_masks", extract(maps), test)


@right("Runs realigned to one reference")
def _(garden: Garden) -> Workflow:
    """All runs are moved to the grid of gardener 01's first run; only its header is used, as a
    contract of the node states."""
    graph, maps = empty(), garden.of("lanterns1")
    moved = foreign(realigned, over=["in_file"], in_file=maps, reference=maps[0])
    contract(moved, rules={"out": each("in_file", geometry=["reference"])}, geometry=["reference"])
    choose = folds()
    test = flips()
    read = extract()
    graph.connect(moved, "out", choose, "in_files")
    graph.connect(moved, "out", read, "in_files")
    graph.connect(moved, "out", test, "in_files")
    return read_and_test(graph, choose, "row_masks", read, test)


@right("A template from everybody's anatomy")
def _(garden: Garden) -> Workflow:
    """The group template is the mean of all anatomies, and a region is drawn from it: anatomies
    are not what is tested."""
    return group_then_test(garden.of("T1w"), garden.of("lanterns1"))


@right("Motion decides who stays")
def _(garden: Garden) -> Workflow:
    """Gardeners who moved more than 2 mm in the very run are left out; how much somebody moved
    says nothing of the response, as a contract of the node states."""
    graph, maps = empty(), garden.of("lanterns1")
    moved = foreign(motion_of, over=["in_file"], in_file=maps)
    contract(moved, geometry=["in_file"])
    keep = Node(KeepSubjects(in_files=maps, labels=list(SUBS), keep=Keep(at_most=2.0)), "keep")
    graph.connect(moved, "out", keep, "measures")
    return kept_and_tested(graph, garden, keep)


@right("A gardener left out beforehand", left_out=(("06", "fell asleep"),))
def _(garden: Garden) -> Workflow:
    """Gardener 06 has an exclude_reason in the study table and takes no part."""
    maps, labels = garden.of("lanterns1", SUBS[:5]), SUBS[:5]
    choose, test = by_fold(maps, PLAIN, labels), flip_test(maps, PLAIN, labels)
    read = extract(maps, labels=list(labels))
    return read_and_test(empty(), choose, "row_masks", read, test)


@right("Shared tissue priors")
def _(garden: Garden) -> Workflow:
    """The tissue probabilities that came with the software, declared, bound the search of every
    fold."""
    graph, maps = empty(), garden.of("lanterns1")
    prior = Node(GivenMask(in_file=garden.outside("tissue"), reference=maps[0]), "prior")
    choose, test = by_fold(maps, PLAIN), flip_test(maps, PLAIN)
    graph.connect(prior, "mask_file", choose, "search_file")
    graph.connect(prior, "mask_file", test, "search_file")
    return read_and_test(graph, choose, "row_masks", extract(maps), test)


@right("A localizer in each gardener's own space")
def _(garden: Garden) -> Workflow:
    """Each gardener's region is chosen on their own scan of paths and read in their own lanterns,
    in a space of their own; the claim is about replicable effects within people."""
    graph = empty()
    own = foreign(strongest, over=["in_file"], in_file=garden.of("paths"))
    return read_and_test(graph, own, "out", extract(garden.of("lanterns1")), fixed_test())


@right("The localizer as a ready-made plan")
def _(garden: Garden) -> Workflow:
    """The same with the plan that comes with sequester."""
    plan = localizer("w", Procedure(Strongest(6, "mean")), list(SUBS))
    return planned(plan, effects=garden.of("lanterns1"), choosing=garden.of("paths"))


@right("A group localizer, the claim kept narrow")
def _(garden: Garden) -> Workflow:
    """A group map of everybody's paths chooses, everybody's lanterns are tested, and the claim is
    declared to be about these gardeners only."""
    read = extract(garden.of("lanterns1"), these_subjects=True)
    test = fixed_test(these_subjects=True)
    return group_then_test(garden.of("paths"), [], read, test)


@right("Leave one run out within each gardener")
def _(garden: Garden) -> Workflow:
    """Each gardener's region for one run is chosen on the other; the two values are averaged
    before the test across gardeners."""
    rule = Procedure(Strongest(6, "mean"), LeaveOneOut(2))
    plan = own_masks("w", rule, [*SUBS, *SUBS], ["1"] * 6 + ["2"] * 6)
    return planned(plan, effects=garden.of("lanterns1") + garden.of("lanterns2"))


@right("Half the gardeners choose for the other half")
def _(garden: Garden) -> Workflow:
    """A group map of three gardeners chooses, the other three are tested."""
    read = extract(garden.of("lanterns1", SUBS[3:]), labels=list(SUBS[3:]))
    return group_then_test(garden.of("lanterns1", SUBS[:3]), [], read)


@right("A second contrast, chosen in held-out gardeners")
def _(garden: Garden) -> Workflow:
    """The autumn map chooses and the spring map is tested, and the tested gardener's autumn is
    held out with their spring."""
    chosen, tested = garden.of("autumn"), garden.of("spring")
    choose, test = by_fold(chosen, PLAIN), flip_test(chosen, PLAIN)
    test.inputs.tested_files = tested
    return read_and_test(empty(), choose, "row_masks", extract(tested), test)


@right("A whole parcellation")
def _(garden: Garden) -> Workflow:
    """Every label of a declared atlas is one test of a family."""
    graph, maps = empty(), garden.of("lanterns1")
    read = ExtractParcels(in_files=maps, labels=list(SUBS), label_files=[garden.outside("atlas")])
    read = Node(read, "read")
    test = Node(FamilyTest(labels=list(SUBS), names=NAMES), "test")
    fields = ("values_file", "coverage_file", "parcels", "sizes")
    graph.connect([(read, test, [(f, f) for f in fields])])
    return graph


@right("A sphere from a paper")
def _(garden: Garden) -> Workflow:
    """The centre comes from a paper of 1911, which is declared as its origin."""
    maps = garden.of("lanterns1")
    ball = SphereMask(
        reference=maps[0], centre=(3.0, 3.0, 3.0), radius=4.0, origin="a paper of 1911"
    )
    return read_and_test(empty(), Node(ball, "ball"), "mask_file", extract(maps), fixed_test())


@right("A pilot with other gardeners")
def _(garden: Garden) -> Workflow:
    """The region was drawn on a pilot with gardeners 01 and 02, as its origin says, and they are
    not tested."""
    pilot = Origin("our pilot", ("pilot.nii",), (Unit(sub="01"), Unit(sub="02")))
    garden.declare(pilot)
    maps = garden.of("lanterns1", SUBS[2:])
    region = Node(GivenMask(in_file=garden.outside("pilot"), reference=maps[0]), "given")
    read = extract(maps, labels=list(SUBS[2:]))
    return read_and_test(empty(), region, "mask_file", read, fixed_test())


@right("A tree of symbolic links")
def _(garden: Garden) -> Workflow:
    """The maps lie in a store and the study names links to them; the pipeline is given the
    files in the store."""
    maps = stored(garden)
    choose, test = by_fold(maps, PLAIN), flip_test(maps, PLAIN)
    return read_and_test(empty(), choose, "row_masks", extract(maps), test)


@right("The study seen from inside a container")
def _(garden: Garden) -> Workflow:
    """The folder is mounted under another name; paths in the study are relative to it."""
    inside = garden.root.parent / "mounted"
    if not inside.exists():
        inside.symlink_to(garden.root)
    garden.root = inside
    return atlas_test(garden.declare())


@right("Files found by a grabber")
def _(garden: Garden) -> Workflow:
    """A grabber finds the maps by a pattern; what it will find is known before the run."""
    graph = empty()
    grab = Node(DataGrabber(outfields=["maps"]), "grab")
    grab.inputs.base_directory = str(garden.root)
    grab.inputs.template, grab.inputs.sort_filelist = "sub-*_lanterns1.nii", True
    choose = folds()
    test = flips()
    read = extract()
    for node in (choose, read, test):
        graph.connect(grab, "maps", node, "in_files")
    return read_and_test(graph, choose, "row_masks", read, test)


@right("Iterated over gardeners and joined")
def _(garden: Garden) -> Workflow:
    """Smoothing is iterated over the gardeners, a JoinNode gathers them, and the folds are made
    after it."""
    graph = empty()
    start = Node(IdentityInterface(["map"]), "start", iterables=[("map", garden.of("lanterns1"))])
    smooth = foreign(average, "smooth")
    join = JoinNode(IdentityInterface(["maps"]), joinsource="start", joinfield="maps", name="join")
    choose = folds()
    test = flips()
    read = extract()
    graph.connect([(start, smooth, [("map", "in_files")]), (smooth, join, [("out", "maps")])])
    for node in (choose, read, test):
        graph.connect(join, "maps", node, "in_files")
    return read_and_test(graph, choose, "row_masks", read, test)


@right("Follow-up minus baseline, chosen on others")
def _(garden: Garden) -> Workflow:
    """Autumn minus spring is tested, in regions chosen on the differences of the others."""
    graph = empty()
    change = foreign(minus, over=["in_file", "other"])
    change.inputs.in_file, change.inputs.other = garden.of("autumn"), garden.of("spring")
    choose = folds()
    test = flips()
    read = extract()
    for node in (choose, read, test):
        graph.connect(change, "out", node, "in_files")
    return read_and_test(graph, choose, "row_masks", read, test)


@right("A connectivity map of a scan that is not tested")
def _(garden: Garden) -> Workflow:
    """A map of the resting scans of three gardeners chooses; the lanterns of the other three are
    tested."""
    read = extract(garden.of("lanterns1", SUBS[3:]), labels=list(SUBS[3:]))
    return group_then_test(garden.of("rest", SUBS[:3]), [], read)


@right("Any group software between the folds")
def _(garden: Garden) -> Workflow:
    """A lab's own group map is made once per fold, on the maps that choose there."""
    body = Function(function=average, output_names=["out"])
    plan = around_folds("w", body, "in_files", "out", Strongest(6), list(SUBS))
    return planned(plan, effects=garden.of("lanterns1"))


@right("A region chosen by age, held out")
def _(garden: Garden) -> Workflow:
    """The correlation with age chooses without each gardener's map and age, and the exchange
    repeats all of it."""
    maps = garden.of("lanterns1")
    choose, test = by_fold(maps, with_age()), flip_test(maps, with_age())
    return read_and_test(empty(), choose, "row_masks", extract(maps), test)


@right("Two banks compared, held out")
def _(garden: Garden) -> Workflow:
    """The difference of the two banks chooses, fold by fold, and the banks are exchanged."""
    maps, folds = garden.of("lanterns1"), KFold(3)
    choose, test = by_fold(maps, with_bank(scheme=folds)), flip_test(maps, with_bank(scheme=folds))
    return read_and_test(empty(), choose, "row_masks", extract(maps), test)


@right("Chosen by age on anatomies, tested against mood")
def _(garden: Garden) -> Workflow:
    """Where anatomies go with age chooses; the response there is compared with mood."""
    graph, region = chosen_by_age(garden, "T1w")
    return read_and_test(graph, region, "out", extract(garden.of("lanterns1")), correlating(MOOD))


@right("The atlas and a score")
def _(garden: Garden) -> Workflow:
    """The response in a region of the atlas is correlated with age by a lab's own function."""
    region = foreign(strongest, in_file=garden.outside("atlas"))
    read = extract(garden.of("lanterns1"))
    return read_and_test(empty(), region, "out", read, correlating(AGE))


@right("A lab's own extraction and test, by contract")
def _(garden: Garden) -> Workflow:
    """A lab's own functions read and test; contracts name their inputs, and the region comes
    from the atlas."""
    graph, maps = empty(), garden.of("lanterns1")
    read = reading(in_file=maps, mask_file=[garden.outside("atlas")] * 6)
    graph.connect(read, "out", own_test(), "values")
    return graph


@right("Own runs averaged before a lab's own test")
def _(garden: Garden) -> Workflow:
    """Two runs of each gardener are read in the atlas, and averaged before the test."""
    graph, together = empty(), Node(Merge(2, axis="hstack"), "together")
    means = foreign(mean_of, over=["values"])
    for run in ("1", "2"):
        atlas = [garden.outside("atlas")] * 6
        read = reading(f"read{run}", in_file=garden.of(f"lanterns{run}"), mask_file=atlas)
        graph.connect(read, "out", together, f"in{run}")
    graph.connect(together, "out", means, "values")
    graph.connect(means, "out", own_test(), "values")
    return graph


@right("An exploratory look")
def _(garden: Garden) -> Workflow:
    """The strongest voxels of the group map are read on the same maps, declared exploratory; the
    values are marked biased and no test is made."""
    graph, maps = empty(), garden.of("lanterns1")
    group, region = foreign(average, in_files=maps), foreign(strongest)
    read = extract(maps, exploratory=True)
    graph.connect([(group, region, [("out", "in_file")]), (region, read, [("out", "mask_files")])])
    return graph


@right("Relatives held out together", exchange=BLANK)
def _(garden: Garden) -> Workflow:
    """Gardeners 02 and 05 are kin, and share one label, so that a fold holds out both."""
    maps = garden.of("lanterns1")
    labels = [garden.study.label_of(path) for path in maps]
    choose, test = by_fold(maps, PLAIN, labels), flip_test(maps, PLAIN, labels)
    return read_and_test(empty(), choose, "row_masks", extract(maps, labels=labels), test)


@right("Runs averaged by our own node")
def _(garden: Garden) -> Workflow:
    """Two runs of each gardener become one map, and the folds are made after that."""
    graph = empty()
    runs = [list(pair) for pair in zip(garden.of("lanterns1"), garden.of("lanterns2"), strict=True)]
    maps = Node(SubjectMaps(in_files=runs, labels=list(SUBS)), "maps")
    choose = folds()
    test = flips()
    read = extract()
    for node in (choose, read, test):
        graph.connect(maps, "out_files", node, "in_files")
    return read_and_test(graph, choose, "row_masks", read, test)


@right("Halves taken by a function on a connection")
def _(garden: Garden) -> Workflow:
    """A function on a connection hands the first three maps to the group map and the last three
    to the extraction: it says by name which it hands on."""
    graph, start = empty(), Node(IdentityInterface(["maps"]), "start")
    start.inputs.maps = garden.of("lanterns1")
    group, region, read = foreign(average), foreign(strongest), extract(labels=list(SUBS[3:]))
    graph.connect(start, ("maps", first_half), group, "in_files")
    graph.connect(start, ("maps", second_half), read, "in_files")
    graph.connect(group, "out", region, "in_file")
    return read_and_test(graph, region, "out", read, fixed_test())


@right("A command with a place to write to")
def _(garden: Garden) -> Workflow:
    """A lab's own command names the atlas, a program, and a file that it will write."""
    text = f"/bin/cp {garden.outside('atlas')} {garden.root.parent}/nowhere/out.nii"
    region = foreign(called_by, mask_file=garden.outside("atlas"), command=text)
    maps = garden.of("lanterns1")
    return read_and_test(empty(), region, "out", extract(maps), fixed_test())


# -- wrong -------------------------------------------------------------------------------------

CIRCULAR = "the mask was chosen on the data it would be tested on"
ANOTHER = "the mask was chosen on another map of the very data it would be tested on"
PERSISTENT = "the mask was chosen on other runs of several subjects, the tested ones among them"
TURNS = "values are cross-fitted"


@wrong("Chosen and tested on the same maps", CIRCULAR)
def _(garden: Garden) -> Workflow:
    """The strongest voxels of the group map are tested on the maps that made it."""
    maps = garden.of("lanterns1")
    return group_then_test(maps, maps)


@wrong("One gardener too many", CIRCULAR)
def _(garden: Garden) -> Workflow:
    """Half the gardeners choose for the other half, but one of them is in both halves."""
    read = extract(garden.of("lanterns1", SUBS[2:]), labels=list(SUBS[2:]))
    return group_then_test(garden.of("lanterns1", SUBS[:3]), [], read)


@wrong("A map of all runs against one of them", ANOTHER)
def _(garden: Garden) -> Workflow:
    """A gardener's own map over all runs chooses, and one of the runs is tested: a map without
    a run may hold any run."""
    own = foreign(strongest, over=["in_file"], in_file=garden.of("lanterns"))
    return read_and_test(empty(), own, "out", extract(garden.of("lanterns1")), fixed_test())


@wrong("Another run of the same gardeners", PERSISTENT)
def _(garden: Garden) -> Workflow:
    """The group map of the first runs chooses, and the second runs of the same people are tested
    as if they were other people."""
    return group_then_test(garden.of("lanterns1"), garden.of("lanterns2"))


@wrong("A connectivity map of the tested scan", CIRCULAR)
def _(garden: Garden) -> Workflow:
    """A declared seed makes a connectivity map of the very scan whose response is tested; a map
    derived from a scan is still that scan."""
    graph, maps = empty(), garden.of("lanterns1")
    connected = foreign(minus, "connected", over=["in_file"], in_file=maps)
    connected.inputs.other = garden.outside("seed")
    group, region = foreign(average), foreign(strongest)
    graph.connect(connected, "out", group, "in_files")
    graph.connect(group, "out", region, "in_file")
    return read_and_test(graph, region, "out", extract(maps), fixed_test())


@wrong("Centred over everybody", CIRCULAR)
def _(garden: Garden) -> Workflow:
    """The mean of all gardeners is taken off every map before the folds are made, so that the
    held-out map is in every other one."""
    graph, maps = empty(), garden.of("lanterns1")
    middle = foreign(centred, in_files=maps)
    choose = folds()
    test = flips()
    read = extract(maps)
    graph.connect(middle, "out", choose, "in_files")
    graph.connect(middle, "out", test, "in_files")
    return read_and_test(graph, choose, "row_masks", read, test)


@wrong("A score used twice", "its region was chosen by age of the very subjects")
def _(garden: Garden) -> Workflow:
    """Where anatomies go with age chooses; the response there, in maps that chose nothing, is
    correlated with age."""
    graph, region = chosen_by_age(garden, "T1w")
    return read_and_test(graph, region, "out", extract(garden.of("lanterns1")), correlating(AGE))


@wrong("A plain correlation after leaving one out", TURNS)
def _(garden: Garden) -> Workflow:
    """The correlation with age chooses without each gardener, and a plain correlation with age
    is computed of the held-out values."""
    maps = garden.of("lanterns1")
    choose = by_fold(maps, with_age())
    return read_and_test(empty(), choose, "row_masks", extract(maps), correlating(AGE))


@wrong("A plain correlation, scores taking turns on anatomies", "chosen by age of the other")
def _(garden: Garden) -> Workflow:
    """Anatomies and ages of the others choose, the response of the held-out gardener is read: the
    maps share nothing, but the ages of the others tie the values."""
    choose = by_fold(garden.of("T1w"), with_age())
    read = extract(garden.of("lanterns1"))
    return read_and_test(empty(), choose, "row_masks", read, correlating(AGE))


@wrong("Standardised ages", "its region was chosen by age of the very subjects")
def _(garden: Garden) -> Workflow:
    """Anatomies go with ages that were standardised by hand; they are still the ages with which
    the response is compared."""
    graph, maps = empty(), garden.of("T1w")
    ages = [round((age - 42.5) / 12.2, 6) for age in AGE]
    design = regression(ages, name="age")
    group = Node(GroupMap(in_files=maps, labels=list(SUBS), design=design), "group")
    region = Node(ChooseMask(rule=Strongest(6)), "choose")
    graph.connect(group, "out_file", region, "in_file")
    read = extract(garden.of("lanterns1"))
    return read_and_test(graph, region, "mask_file", read, correlating(AGE))


@wrong("Scores that nobody declared", "nobody has declared what the scores 'age' given to w.choose")
def _(garden: Garden) -> Workflow:
    """The ages given to the folds are not those of the study table; they might be anything, a
    response read earlier too."""
    of = tuple(zip(SUBS, (1.2, 0.4, 2.2, 0.9, 1.7, 0.1), strict=True))
    odd, maps = Procedure(Strongest(6), model=Score(of, name="age")), garden.of("lanterns1")
    choose, test = by_fold(maps, odd), flip_test(maps, odd)
    return read_and_test(empty(), choose, "row_masks", extract(maps), test)


@wrong("Numbers typed into a lab's own node", "nobody has declared what the scores 'scores' given")
def _(garden: Garden) -> Workflow:
    """A lab's own node makes a map with one number for each gardener, which no column of the
    study table holds."""
    graph = empty()
    numbers = [0.31, 0.18, 0.92, 0.44, 0.27, 0.65]
    scores = foreign(going_with, in_files=garden.of("T1w"), scores=numbers)
    region = foreign(strongest)
    graph.connect(scores, "out", region, "in_file")
    return read_and_test(graph, region, "out", extract(garden.of("lanterns1")), fixed_test())


@wrong("Banks chosen by everybody, compared in everybody", "chosen by bank of the very subjects")
def _(garden: Garden) -> Workflow:
    """Anatomies that differ between the banks choose; the response there is compared between
    the same banks."""
    graph = empty()
    scores = foreign(going_with, in_files=garden.of("T1w"), scores=list(BANK))
    region = foreign(strongest)
    graph.connect(scores, "out", region, "in_file")
    return read_and_test(graph, region, "out", extract(garden.of("lanterns1")), correlating(BANK))


@wrong("Follow-up minus baseline", CIRCULAR)
def _(garden: Garden) -> Workflow:
    """The spring maps choose, and autumn minus spring is tested: spring is in the difference,
    with its sign turned."""
    graph = empty()
    change = foreign(minus, over=["in_file", "other"])
    change.inputs.in_file, change.inputs.other = garden.of("autumn"), garden.of("spring")
    group, region = foreign(average, in_files=garden.of("spring")), foreign(strongest)
    read = extract()
    graph.connect(group, "out", region, "in_file")
    graph.connect(change, "out", read, "in_files")
    return read_and_test(graph, region, "out", read, fixed_test())


@wrong(
    "Relatives across the fold",
    "chosen on somebody who counts as the same subject as the tested one (exchange kin)",
    exchange=BLANK,
)
def _(garden: Garden) -> Workflow:
    """Gardeners 02 and 05 are kin, and each is held out while the other chooses."""
    maps = garden.of("lanterns1")
    choose, test = by_fold(maps, PLAIN), flip_test(maps, PLAIN)
    return read_and_test(empty(), choose, "row_masks", extract(maps), test)


@wrong("A waiver that does not cover the score", "chosen by age of the very subjects")
def _(garden: Garden) -> Workflow:
    """A group map of everybody's paths and ages chooses; the claim is declared to be about these
    gardeners only, which does not make the ages new."""
    graph, region = chosen_by_age(garden, "paths")
    test = correlating(AGE)
    contract(test, statistic=Statistic(values="values", scores=("scores",), these_only=True))
    read = extract(garden.of("lanterns1"), these_subjects=True)
    return read_and_test(graph, region, "out", read, test)


@wrong("A lab's own t-test after leaving one out", TURNS)
def _(garden: Garden) -> Workflow:
    """Every region is chosen without the gardener, and a lab's own t-test takes the values as if
    they were independent."""
    maps = garden.of("lanterns1")
    return read_and_test(empty(), by_fold(maps, PLAIN), "row_masks", extract(maps), own_test())


@wrong("Our own t-test after leaving one out", TURNS)
def _(garden: Garden) -> Workflow:
    """The same with the t-test for regions that no fold chose."""
    maps = garden.of("lanterns1")
    return read_and_test(empty(), by_fold(maps, PLAIN), "row_masks", extract(maps), fixed_test())


@wrong("The held-out values scaled on the way", TURNS)
def _(garden: Garden) -> Workflow:
    """A node between the extraction and the t-test changes nothing about where the values come
    from."""
    graph, maps = empty(), garden.of("lanterns1")
    read, doubled = extract(maps), foreign(scaled)
    graph.connect(by_fold(maps, PLAIN), "row_masks", read, "mask_files")
    graph.connect(read, "values", doubled, "values")
    graph.connect(doubled, "out", own_test(), "values")
    return graph


@wrong("Error bars on biased values", "the values are marked biased, and no statistic accepts them")
def _(garden: Garden) -> Workflow:
    """An exploratory look is handed to a t-test."""
    maps = garden.of("lanterns1")
    return group_then_test(maps, [], extract(maps, exploratory=True))


@wrong("A t-test pooled over run folds", "average the values of each person first")
def _(garden: Garden) -> Workflow:
    """Each gardener's region for one run is chosen on the other run, and the twelve values enter a
    t-test as if they were twelve people's."""
    graph, maps = empty(), garden.of("lanterns1") + garden.of("lanterns2")
    choose = ChooseWithin(
        in_files=maps,
        labels=[*SUBS, *SUBS],
        runs=["1"] * 6 + ["2"] * 6,
        procedure=Procedure(Strongest(6, "mean"), LeaveOneOut(2)),
    )
    read = extract(maps, labels=[*SUBS, *SUBS])
    return read_and_test(graph, Node(choose, "choose"), "row_masks", read, own_test())


@wrong("Two runs each, counted as twelve people", "its 12 values are of 6 people")
def _(garden: Garden) -> Workflow:
    """A region of the atlas is read in both runs of everybody, and all values enter one t-test."""
    graph, maps = empty(), garden.of("lanterns1") + garden.of("lanterns2")
    read = reading(in_file=maps, mask_file=[garden.outside("atlas")] * 12)
    graph.connect(read, "out", own_test(), "values")
    return graph


@wrong("A population claim from a group localizer", "does not protect a claim about those")
def _(garden: Garden) -> Workflow:
    """The claim about these gardeners only is declared where the values are read, and not where
    they are tested."""
    read = extract(garden.of("lanterns1"), these_subjects=True)
    return group_then_test(garden.of("paths"), [], read, own_test())


@wrong("Nobody knows where the region is from", "nobody has declared what stranger.nii derives")
def _(garden: Garden) -> Workflow:
    """A mask lies in the folder, and neither the table nor an origin names it."""
    region = foreign(strongest, in_file=garden.outside("stranger"))
    return read_and_test(empty(), region, "out", extract(garden.of("lanterns1")), fixed_test())


@wrong("A pilot with the tested gardeners", "the region was made from the data it would be tested")
def _(garden: Garden) -> Workflow:
    """The region was drawn on a pilot that used the first runs of gardeners 01 and 02, as its
    origin says, and all first runs are tested."""
    units = tuple(Unit(sub=s, task="lanterns", run="1", suffix="bold") for s in SUBS[:2])
    garden.declare(Origin("our pilot", ("pilot.nii",), units))
    maps = garden.of("lanterns1")
    region = Node(GivenMask(in_file=garden.outside("pilot"), reference=maps[0]), "given")
    return read_and_test(empty(), region, "mask_file", extract(maps), fixed_test())


@wrong("Responders only", "subjects were kept or left out by the very data that is tested")
def _(garden: Garden) -> Workflow:
    """The region comes from the atlas, but only gardeners who respond in the very run are
    tested."""
    return kept_by_response(garden, "lanterns1")


@wrong("Responders of another scan", "subjects were kept or left out by other data of the tested")
def _(garden: Garden) -> Workflow:
    """Only gardeners who respond to paths are tested with lanterns: what persists in them is in
    both."""
    return kept_by_response(garden, "paths")


@wrong("Motion by a node that nobody vouches for", "kept or left out by the very data")
def _(garden: Garden) -> Workflow:
    """A lab's own node says how much somebody moved, and no contract states that it looks at the
    header only: it may look at the response."""
    graph, maps = empty(), garden.of("lanterns1")
    keep = Node(KeepSubjects(in_files=maps, labels=list(SUBS), keep=Keep(at_most=2.0)), "keep")
    graph.connect(foreign(motion_of, over=["in_file"], in_file=maps), "out", keep, "measures")
    return kept_and_tested(graph, garden, keep)


@wrong("The oldest gardeners, correlated with age", "kept or left out by age, in the data")
def _(garden: Garden) -> Workflow:
    """Only gardeners above 35 take part, and the response is compared with age."""
    graph, maps = empty(), garden.of("lanterns1")
    keep = KeepSubjects(
        in_files=maps,
        labels=list(SUBS),
        measures=[float(age) for age in AGE],
        measure_name="age",
        keep=Keep(at_least=35.0),
    )
    read = Node(Extract(mask_files=[garden.outside("atlas")]), "extract")
    keep = Node(keep, "keep")
    graph.connect(keep, "out_files", read, "in_files")
    graph.connect(keep, "out_labels", read, "labels")
    graph.connect(read, "values", correlating([age for age in AGE if age >= 35]), "values")
    return graph


@wrong("The best size, looked for on the tested maps", CIRCULAR)
def _(garden: Garden) -> Workflow:
    """Paths of three gardeners choose and lanterns of the other three are tested, but how many
    voxels are taken was looked for in everybody's lanterns."""
    graph, maps = empty(), garden.of("lanterns1")
    other, region = foreign(average, in_files=garden.of("paths", SUBS[:3])), foreign(strongest)
    graph.connect(other, "out", region, "in_file")
    graph.connect(foreign(best_size, in_files=maps), "out", region, "k")
    read = extract(maps[3:], labels=list(SUBS[3:]))
    return read_and_test(graph, region, "out", read, fixed_test())


@wrong("Each fold's region matched to the region of everybody", CIRCULAR)
def _(garden: Garden) -> Workflow:
    """Every fold's region is cut down to the region of the whole group, which the held-out
    gardener helped to choose."""
    graph, maps = empty(), garden.of("lanterns1")
    group, region = foreign(average, in_files=maps), foreign(strongest, k=20)
    cut = MapNode(CombineMasks(how="intersection"), iterfield=["in_files"], name="cut")
    both = MapNode(Merge(2), iterfield=["in1"], name="both")
    graph.connect(group, "out", region, "in_file")
    graph.connect(by_fold(maps, PLAIN), "row_masks", both, "in1")
    graph.connect([(region, both, [("out", "in2")]), (both, cut, [("out", "in_files")])])
    return read_and_test(graph, cut, "mask_file", extract(maps), own_test())


@wrong("A peak of the tested map as the centre", CIRCULAR)
def _(garden: Garden) -> Workflow:
    """The sphere has a declared origin, but its centre is computed from the tested group map."""
    graph, maps = empty(), garden.of("lanterns1")
    ball = SphereMask(reference=maps[0], radius=4.0, origin="a paper of 1911")
    ball, peak = Node(ball, "ball"), foreign(peak_of)
    graph.connect(foreign(average, in_files=maps), "out", peak, "in_file")
    graph.connect(peak, "out", ball, "centre")
    return read_and_test(graph, ball, "mask_file", extract(maps), fixed_test())


@wrong("Masks and maps that do not pair up", "5 masks do not pair up with 6 maps")
def _(garden: Garden) -> Workflow:
    """One gardener has no localizer, and the list of regions is one shorter than that of maps."""
    own = foreign(strongest, over=["in_file"], in_file=garden.of("paths", SUBS[:5]))
    return read_and_test(empty(), own, "out", extract(garden.of("lanterns1")), fixed_test())


@wrong("A peak found by a function on a connection", CIRCULAR)
def _(garden: Garden) -> Workflow:
    """The centre of a declared sphere comes from a function on a connection, which the engine
    calls before there is a graph to look at."""
    graph, maps = empty(), garden.of("lanterns1")
    start = Node(IdentityInterface(["maps"]), "start")
    start.inputs.maps = maps
    ball = Node(SphereMask(reference=maps[0], radius=4.0, origin="a paper of 1911"), "ball")
    graph.connect(start, ("maps", peak_of_first), ball, "centre")
    return read_and_test(graph, ball, "mask_file", extract(maps), fixed_test())


@wrong("Flips inside the region of everybody", "a search region that was made from the tested data")
def _(garden: Garden) -> Workflow:
    """The regions are chosen fold by fold in the whole garden, but the test chooses again only
    where the map of everybody is strong."""
    graph, maps = empty(), garden.of("lanterns1")
    group, around, test = foreign(average), foreign(strongest, k=20), flip_test(maps, PLAIN)
    group.inputs.in_files = maps
    graph.connect([(group, around, [("out", "in_file")]), (around, test, [("out", "search_file")])])
    return read_and_test(graph, by_fold(maps, PLAIN), "row_masks", extract(maps), test)


@wrong("The best parcel of an atlas", CIRCULAR)
def _(garden: Garden) -> Workflow:
    """The atlas is declared; which of its parcels is read was looked for in the tested maps."""
    graph, maps = empty(), garden.of("lanterns1")
    read = ExtractParcels(in_files=maps, labels=list(SUBS), label_files=[garden.outside("atlas")])
    read, test = Node(read, "read"), Node(FamilyTest(labels=list(SUBS), names=NAMES), "test")
    graph.connect(foreign(best_parcels, in_files=maps), "out", read, "parcels")
    fields = ("values_file", "coverage_file", "parcels", "sizes")
    graph.connect([(read, test, [(f, f) for f in fields])])
    return graph


@wrong("A mask in the text of a command", "nobody has declared what stranger.nii derives from")
def _(garden: Garden) -> Workflow:
    """A lab's own node is given the atlas, and another mask as a word of a command."""
    text = f"-mask {garden.outside('stranger')},1 -bin"
    region = foreign(called_by, mask_file=garden.outside("atlas"), command=text)
    maps = garden.of("lanterns1")
    return read_and_test(empty(), region, "out", extract(maps), fixed_test())


@wrong("Maps behind a pattern", CIRCULAR)
def _(garden: Garden) -> Workflow:
    """A lab's own node is given the atlas, and a pattern that the names of the tested maps
    have."""
    pattern = str(garden.root / "sub-{sub}_lanterns1.nii")
    region = foreign(called_by, mask_file=garden.outside("atlas"), command=pattern)
    maps = garden.of("lanterns1")
    return read_and_test(empty(), region, "out", extract(maps), fixed_test())


@wrong("Ages in a table", "its region was chosen by age of the very subjects")
def _(garden: Garden) -> Workflow:
    """Ages are a column of a design that is typed into a lab's own node, and a mapping in the
    test; they are still the ages."""
    graph = empty()
    design = [[1.0, float(age)] for age in AGE]
    scores = foreign(going_with, in_files=garden.of("T1w"), scores=design)
    region, test = foreign(strongest), correlating(None)
    test.inputs.scores = dict(zip(SUBS, AGE, strict=True))
    graph.connect(scores, "out", region, "in_file")
    return read_and_test(graph, region, "out", extract(garden.of("lanterns1")), test)


@wrong("Averaged over the wrong people", "its 12 values are of 6 people")
def _(garden: Garden) -> Workflow:
    """Two runs of each gardener are read in the atlas; the labels of the test are in another order
    than its values, so that runs of two people are averaged."""
    graph, maps = empty(), garden.of("lanterns1") + garden.of("lanterns2")
    region = foreign(strongest, in_file=garden.outside("atlas"))
    test = fixed_test(labels=[sub for sub in SUBS for _ in range(2)])
    return read_and_test(graph, region, "out", extract(maps, labels=[*SUBS, *SUBS]), test)


@wrong("Parcels of two runs, counted as twelve people", "its 12 values are of 6 people")
def _(garden: Garden) -> Workflow:
    """Every parcel of the atlas is read in both runs of everybody, and each run has a label of its
    own."""
    graph, maps = empty(), garden.of("lanterns1") + garden.of("lanterns2")
    labels = [f"{sub}-{run}" for run in "12" for sub in SUBS]
    read = ExtractParcels(in_files=maps, labels=labels, label_files=[garden.outside("atlas")])
    read, test = Node(read, "read"), Node(FamilyTest(labels=labels, names=NAMES), "test")
    fields = ("values_file", "coverage_file", "parcels", "sizes")
    graph.connect([(read, test, [(f, f) for f in fields])])
    return graph


@wrong("A certificate that says nothing of the people", "the certificate does not hold")
def _(garden: Garden) -> Workflow:
    """The errors of two contrasts are uncorrelated within a run; what varies between gardeners is
    left out."""
    told = Certificate("amber + teal", "amber - teal", (Condition("run", 0.0),), ())
    read = extract(garden.of("lanterns1"), certificate=told)
    return group_then_test(garden.of("lanterns"), [], read, fixed_test(certificate=told))


@wrong("One map under two names, and a certificate", "which chose and is tested")
def _(garden: Garden) -> Workflow:
    """A certificate covers one contrast that chooses and another that is tested, but the files in
    the store that choose are those whose links are tested."""
    read = extract(garden.of("lanterns1"), certificate=UNRELATED)
    return group_then_test(stored(garden), [], read, fixed_test(certificate=UNRELATED))


@wrong("A certificate, and other runs", "was not chosen on exactly these")
def _(garden: Garden) -> Workflow:
    """A certificate for two contrasts of the same runs is given to a region that the group's
    second runs chose, to have the first ones speak of more than these gardeners."""
    read = extract(garden.of("lanterns1"), certificate=UNRELATED)
    return group_then_test(garden.of("lanterns2"), [], read, fixed_test(certificate=UNRELATED))


@wrong("Our node, changed", CIRCULAR)
def _(garden: Garden) -> Workflow:
    """A lab has derived a node of its own from ours; what ours promises of its folds, the new one
    need not keep."""
    maps = garden.of("lanterns1")
    choose = Node(OwnFolds(in_files=maps, labels=list(SUBS), procedure=PLAIN), "choose")
    read = extract(maps)
    return read_and_test(empty(), choose, "row_masks", read, flip_test(maps, PLAIN))


# -- wrong, which only the run shows ----------------------------------------------------------


@hidden("A map that lies beside the atlas", CIRCULAR)
def _(garden: Garden) -> Workflow:
    """A lab's own node is given the atlas, and hands on the tested map of gardener 01, which lies
    in the same folder."""
    graph, region = empty(), foreign(strongest)
    other = foreign(neighbour, in_file=garden.outside("atlas"))
    graph.connect(other, "out", region, "in_file")
    return read_and_test(graph, region, "out", extract(garden.of("lanterns1")), fixed_test())


@hidden("A copy of a map that lies beside the atlas", CIRCULAR)
def _(garden: Garden) -> Workflow:
    """The same with a copy of that map in the node's own folder; a copy is known by its bytes."""
    graph, region = empty(), foreign(strongest)
    other = foreign(copied, in_file=garden.outside("atlas"))
    graph.connect(other, "out", region, "in_file")
    return read_and_test(graph, region, "out", extract(garden.of("lanterns1")), fixed_test())


@hidden("The map beside the atlas, and a certificate", "which chose and is tested")
def _(garden: Garden) -> Workflow:
    """The same copy, and a certificate for two contrasts that are not the ones."""
    graph, region = empty(), foreign(strongest)
    other = foreign(copied, in_file=garden.outside("atlas"))
    graph.connect(other, "out", region, "in_file")
    read = extract(garden.of("lanterns1"), certificate=UNRELATED)
    return read_and_test(graph, region, "out", read, fixed_test(certificate=UNRELATED))


@hidden("Maps in another order", CIRCULAR)
def _(garden: Garden) -> Workflow:
    """A contract says that a lab's own node hands on map for map, but it turns the list round, so
    that gardeners are read in regions which they chose."""
    graph, maps, read = empty(), garden.of("lanterns1"), extract()
    turned = foreign(reversed_list, in_files=maps)
    contract(turned, rules={"out": each("in_files")})
    graph.connect(turned, "out", read, "in_files")
    return read_and_test(graph, by_fold(maps, PLAIN), "row_masks", read, flip_test(maps, PLAIN))
