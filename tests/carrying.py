"""Workflows whose files say what they derive from, drawn at random.

Unit i is a text file that holds the number i. Every interface here reads all the files it is
given and writes their numbers into what it makes, so that after a run each file lists the units
it really derives from. `Drawn` wires such interfaces together at random.
"""

from __future__ import annotations

from collections.abc import Callable
from dataclasses import dataclass
from pathlib import Path
from random import Random
from typing import Any

from nipype import Function, IdentityInterface, JoinNode, MapNode, Merge, Node, Rename, Select
from nipype import Workflow as Engine
from nipype.interfaces.base import (
    BaseInterfaceInputSpec,
    File,
    InputMultiObject,
    OutputMultiObject,
    SimpleInterface,
    TraitedSpec,
    traits,
)
from nipype.interfaces.io import DataGrabber, DataSink, SelectFiles
from nipype.interfaces.utility import Split
from nipype.pipeline.plugins.base import PluginBase
from nipype.pipeline.plugins.linear import LinearPlugin
from sequester import Meeting, Statistic, contract, each
from sequester.nodes.folds import KFold
from sequester.nodes.procedure import held_out_rows
from sequester.nodes.rules import Branch, Leaf, Tree, all_but_held_out
from sequester.nodes.touch import Unit
from sequester.workflows.ancestry import Ancestry, files_in, node_name
from sequester.workflows.study import Row, Study

N = 8


def carried_study(root: Path) -> Study:
    """N subjects; file i holds the number i."""
    root.mkdir(parents=True)
    rows = []
    for i in range(N):
        (root / f"f{i}.txt").write_text(str(i))
        rows.append(Row(f"f{i}.txt", None, Unit(sub=str(i), suffix="bold")))
    return Study(root, rows)


class WatchPlugin(PluginBase):
    """Keeps the ancestry of the graph it is given; runs it, without its probes, when asked to."""

    def __init__(self, study: Study, *, run: bool) -> None:
        super().__init__(plugin_args={})
        self.study, self.execute = study, run

    def run(self, graph: Any, config: Any, updatehash: bool = False) -> None:
        self.ancestry = Ancestry(graph, self.study)
        if self.execute:
            real = [node for node in graph.nodes() if not isinstance(node.interface, PROBES)]
            LinearPlugin(plugin_args={}).run(graph.subgraph(real).copy(), config)
        self.graph = graph


def ancestry_of(workflow: Engine, study: Study) -> Ancestry:
    """What is said of a workflow that does not run."""
    watch = WatchPlugin(study, run=False)
    workflow.run(plugin=watch)
    return watch.ancestry


# -- what is really inside, and what was said to be ----------------------------------------------


def inside(value: Any) -> set[int]:
    """The units really inside a value: the numbers in all of its files."""
    return {int(n) for path in files_in(value) for n in Path(path).read_text().split()}


def units_of(tree: Tree) -> set[int]:
    """The units that a tree says are inside."""
    values = tree.touch.values
    return {i for i in range(values.bit_length()) if values >> i & 1}


def said(tree: Tree) -> Any:
    """The units of every element, nested as the tree is; a set where lengths are unknown."""
    return [said(child) for child in tree.children] if isinstance(tree, Branch) else units_of(tree)


def understated(
    tree: Tree, real: Any, where: str = "out", inside: Callable[[Any], set[int]] = inside
) -> list[str]:
    """Where a tree says less than the truth about a real output."""
    if isinstance(tree, Leaf):
        faults = []
        missing = inside(real) - units_of(tree)
        if missing and not tree.touch.unknown:
            faults.append(f"{where}: units {sorted(missing)} are missing")
        if tree.single and isinstance(real, list) and len(real) != 1:
            faults.append(f"{where}: said to be one element, is {len(real)}")
        return faults
    if not isinstance(real, list | tuple):
        # The engine hands on a list of one as its item.
        one = len(tree.children) == 1
        return understated(tree.children[0], real, where, inside) if one else [where]
    if len(tree.children) != len(real):
        return [f"{where}: {len(tree.children)} elements promised, {len(real)} made"]
    return [
        fault
        for i, (child, item) in enumerate(zip(tree.children, real, strict=True))
        for fault in understated(child, item, f"{where}[{i}]", inside)
    ]


def overstated(tree: Tree, real: Any, where: str) -> list[str]:
    """Where a tree says more than the truth, or takes for one what are several."""
    if isinstance(tree, Leaf):
        extra = units_of(tree) - inside(real)
        faults = [f"{where}: units {sorted(extra)} are too much"] if extra else []
        if isinstance(real, list) and len(real) > 1:
            faults.append(f"{where}: {len(real)} elements not told apart")
        return faults
    items = real if isinstance(real, list | tuple) else [real]
    return [
        fault
        for i, (child, item) in enumerate(zip(tree.children, items, strict=False))
        for fault in overstated(child, item, f"{where}[{i}]")
    ]


def results(watch: WatchPlugin) -> list[tuple[str, str, Tree, Any]]:
    """Every output of a finished run: node, output, what was said of it, and what it is."""
    found = []
    for node in watch.graph.nodes():
        if isinstance(node.interface, PROBES):
            continue
        outputs = node.result.outputs
        made = outputs.get() if isinstance(outputs, TraitedSpec) else vars(outputs)
        for output, real in made.items():
            name = node_name(node)
            found.append((name, output, watch.ancestry.outputs[name, output], real))
    return found


# -- interfaces that carry -----------------------------------------------------------------------


def _write(path: Path, units: set[int]) -> str:
    path.write_text(" ".join(map(str, sorted(units))))
    return str(path)


class _OneIn(BaseInterfaceInputSpec):
    files = traits.Any(desc="files, however nested")
    more = traits.Any(desc="further files")


class _OneOut(TraitedSpec):
    out_file = File(exists=True)


class CarryOne(SimpleInterface):
    """One file from all files given; typed as a file, with no contract."""

    input_spec, output_spec = _OneIn, _OneOut

    def _run_interface(self, runtime: Any) -> Any:
        units = inside([self.inputs.files, self.inputs.more])
        self._results["out_file"] = _write(Path(runtime.cwd) / "one.txt", units)
        return runtime


class _ListIn(BaseInterfaceInputSpec):
    files = traits.List(traits.Any, mandatory=True)
    more = traits.Any()


class _ListOut(TraitedSpec):
    out_files = traits.List(File(exists=True))


class CarryEach(SimpleInterface):
    """One file for each item given, and what is shared in all of them."""

    input_spec, output_spec = _ListIn, _ListOut

    def _run_interface(self, runtime: Any) -> Any:
        self._results["out_files"] = [
            _write(Path(runtime.cwd) / f"each{i}.txt", inside([item, self.inputs.more]))
            for i, item in enumerate(self.inputs.files)
        ]
        return runtime


class ForeignEach(CarryEach):
    """The same, and nobody has said so."""


class _SetIn(BaseInterfaceInputSpec):
    files = traits.Set(traits.Any, mandatory=True)


class CarrySet(CarryEach):
    """The same of a set, whose order nobody knows."""

    input_spec = _SetIn

    def _run_interface(self, runtime: Any) -> Any:
        self._results["out_files"] = [
            _write(Path(runtime.cwd) / f"set{i}.txt", inside(item))
            for i, item in enumerate(sorted(self.inputs.files, reverse=True))
        ]
        return runtime


class _MultiIn(BaseInterfaceInputSpec):
    files = InputMultiObject(traits.Any, mandatory=True)


class _MultiOut(TraitedSpec):
    out_files = OutputMultiObject(File(exists=True))


class CarryMulti(CarryEach):
    """The same with ports that wrap a single file into a list, and take it out again."""

    input_spec, output_spec = _MultiIn, _MultiOut

    def _run_interface(self, runtime: Any) -> Any:
        self._results["out_files"] = [
            _write(Path(runtime.cwd) / f"multi{i}.txt", inside(item))
            for i, item in enumerate(self.inputs.files)
        ]
        return runtime


class _FoldsIn(BaseInterfaceInputSpec):
    files = traits.List(traits.Any, mandatory=True)
    labels = traits.List(traits.Str, mandatory=True)
    k = traits.Int(mandatory=True)


def _held_out(settings: Any) -> list[tuple[int, ...]]:
    return held_out_rows(KFold(k=settings["k"]), settings["labels"])


class CarryFolds(SimpleInterface):
    """One file for each fold, from all items that the fold does not hold out."""

    input_spec, output_spec = _FoldsIn, _ListOut

    def _run_interface(self, runtime: Any) -> Any:
        folds = KFold(k=self.inputs.k).folds(self.inputs.labels)
        self._results["out_files"] = [
            _write(
                Path(runtime.cwd) / f"fold{i}.txt",
                inside([self.inputs.files[row] for row in fold.selection]),
            )
            for i, fold in enumerate(folds)
        ]
        return runtime


class _ValueIn(BaseInterfaceInputSpec):
    mask = traits.Any(mandatory=True)
    data = File(exists=True, mandatory=True)


class ForeignValue(SimpleInterface):
    """Somebody's extraction; it is judged, and never run."""

    input_spec, output_spec = _ValueIn, _OneOut


class ForeignTest(SimpleInterface):
    """Somebody's test of values; it is judged, and never run."""

    input_spec, output_spec = _OneIn, _OneOut


PROBES = (ForeignValue, ForeignTest)

contract(CarryEach, rules={"out_files": each("files", shared=("more",))})
contract(CarrySet, rules={"out_files": each("files")})
contract(CarryMulti, rules={"out_files": each("files")})
contract(
    CarryFolds, rules={"out_files": all_but_held_out("files", _held_out, known_by=("labels", "k"))}
)
contract(ForeignValue, extraction=Meeting(mask="mask", data="data"))
contract(ForeignTest, statistic=Statistic(values="files"))


# -- functions, which the graph cannot look into -------------------------------------------------


def blend(a, b=None, name="out.txt"):  # one file, made from all files given
    from pathlib import Path

    def walk(item):
        if isinstance(item, dict):
            item = list(item.values())
        if isinstance(item, (list, tuple)):
            return [n for part in item for n in walk(part)]
        return Path(item).read_text().split() if item else []

    Path(name).write_text(" ".join(sorted({*walk(a), *walk(b)})))
    return str(Path(name).resolve())


def apart(a, n=2):  # n files: each made from some of the files given, and not from the others
    from pathlib import Path

    def walk(item):
        return [n for part in item for n in walk(part)] if isinstance(item, list) else [item]

    given, made = walk(a), []
    for i in range(n):
        path = Path(f"part{i}.txt").resolve()
        units = {n for file in given[i::n] for n in Path(file).read_text().split()}
        path.write_text(" ".join(sorted(units)))
        made.append(str(path))
    return made


def turned(a):  # a connection function: the list the other way round
    return a[::-1] if isinstance(a, list) else a


def last(a):  # a connection function: the last item alone
    return a[-1] if isinstance(a, list) else a


def twice(a):  # a connection function: everything two times
    return [a, a]


def handed_on(a, n=0):  # the very thing it was given
    return a


def place(a):  # 1, whatever it is given
    return [1]


def folder(a):  # the folder of a file, or of the first
    import os

    while isinstance(a, list):
        a = a[0]
    return os.path.dirname(os.path.realpath(a))


def function(body: Callable[..., Any], *names: str) -> Function:
    """A Function with one output, `out`."""
    return Function(input_names=list(names), output_names=["out"], function=body)


# -- workflows drawn at random --------------------------------------------------------------------


@dataclass
class Port:
    """An output to connect from: its structure, and the iterables it depends on.

    Parameters
    ----------
    node : Node or Workflow
    output : str
    shape : None or list
        None for one file, else a list of shapes.
    depends : tuple of str
        Iterable nodes that multiply it, those furthest up first.
    """

    node: Any
    output: str
    shape: Any
    depends: tuple[str, ...] = ()


def _depth(shape: Any) -> int:
    return 0 if shape is None else 1 + max(map(_depth, shape))


def _flat(shape: Any) -> list[Any]:
    return [None] if shape is None else [leaf for item in shape for leaf in _flat(item)]


class Drawn:
    """A workflow drawn at random.

    Parameters
    ----------
    rng : random.Random
    files : list of str
        File i is unit i.
    precise : bool
        Only of constructs whose structure is known before the run.
    steps : int

    Attributes
    ----------
    workflow : Workflow
    probes : list of str
        Names of MapNodes that read every file of the study in a mask; item i reads file i.
    """

    def __init__(self, rng: Random, files: list[str], *, precise: bool, steps: int) -> None:
        self._rng, self._files, self._precise = rng, files, precise
        self.workflow = Engine("w")
        self.workflow.config["execution"] = {
            "create_report": "false",
            "remove_unnecessary_outputs": "false",
            "crashdump_dir": "crashes",
        }
        self._ports: list[Port] = []
        self._n = self._iterated = 0
        self.probes: list[str] = []
        self.used: set[str] = set()
        self._literal()
        if self.pick(2) and self._iterate():
            self.used.add("iterate")
        kinds = [*_PRECISE] if precise else [*_PRECISE, *_LOOSE, *_LOOSE]
        for _ in range(steps):
            kind = kinds[self.pick(len(kinds))]
            if getattr(self, kind)() is not False:
                self.used.add(kind.strip("_"))
        self._probe()

    def pick(self, n: int) -> int:
        """One of n."""
        return self._rng.randrange(n)

    def _name(self, kind: str) -> str:
        self._n += 1
        return f"{kind}{self._n:02d}"

    def _some(self, n: int) -> list[str]:
        start = self.pick(N)
        step = (1, 5)[self.pick(2)]  # both prime to 8: never a file twice
        return [self._files[(start + step * i) % N] for i in range(n)]

    def _port(self, fits: Callable[[Port], bool] = lambda port: True) -> Port | None:
        found = [port for port in self._ports if fits(port)]
        # Newer ones more often, so that graphs grow deep.
        return found[-1 - min(self.pick(len(found)), self.pick(len(found)))] if found else None

    def _connect(self, port: Port, node: Any, field: str) -> Any:
        """Connect, at times with a function; the shape that arrives."""
        if self._precise or self.pick(6):
            self.workflow.connect(port.node, port.output, node, field)
            return port.shape
        body = (turned, last, twice)[self.pick(3)]
        self.used.add("connection function")
        self.workflow.connect([(port.node, node, [((port.output, body), field)])])
        shape = port.shape
        if body is twice:
            return [shape, shape]
        if shape is None:
            return None
        return shape[::-1] if body is turned else shape[-1]

    def _add(self, node: Any, output: str, shape: Any, *sources: Port | None) -> Port:
        depends = dict.fromkeys(d for port in sources if port for d in port.depends)
        order = sorted(depends, key=lambda name: int(name[5:]))
        self._ports.append(Port(node, output, shape, tuple(order)))
        return self._ports[-1]

    def _more(self, node: Any, exclude: tuple[str, ...] = ()) -> Port | None:
        """Perhaps a second input, shared by all elements."""
        what = self.pick(4)
        if what == 1:
            node.inputs.more = self._some(1 + self.pick(2))
        port = self._port() if what == 2 else None
        if port is not None:
            self.workflow.connect(port.node, port.output, node, "more")
        return port

    # -- constructs whose structure is known

    def _literal(self) -> None:
        node = MapNode(CarryOne(), iterfield=["files"], name=self._name("files"))
        n = 2 + self.pick(3)
        node.inputs.files = self._some(n)
        self.workflow.add_nodes([node])
        self._add(node, "out_file", [None] * n)

    def _grab(self) -> None:
        root, n = str(Path(self._files[0]).parent), 1 + self.pick(3)
        if self.pick(2):
            node = Node(
                SelectFiles({"out": f"f[0-{n}].txt"}, base_directory=root),
                name=self._name("select"),
            )
            output = "out"
        else:
            grab = DataGrabber(base_directory=root, template=f"f[0-{n}].txt", sort_filelist=True)
            node, output = Node(grab, name=self._name("grab")), "outfiles"
        self.workflow.add_nodes([node])
        self._add(node, output, [None] * (n + 1))

    def _one(self) -> None:
        port = self._port()
        node = Node(CarryOne(), name=self._name("one"))
        self._connect(port, node, "files")
        self._add(node, "out_file", None, port, self._more(node))

    def _map(self) -> None:
        port = self._port(lambda p: p.shape is not None)
        node = MapNode(CarryOne(), iterfield=["files"], name=self._name("map"))
        shape = self._connect(port, node, "files")
        n = 1 if shape is None else len(shape)
        if self.pick(3) == 0 and n <= N:
            node.iterfield.append("more")
            node._inputs = node._create_dynamic_traits(node.interface.inputs, node.iterfield)
            node.inputs.more = self._some(n)
            self._add(node, "out_file", [None] * n, port)
        else:
            self._add(node, "out_file", [None] * n, port, self._more(node))

    def _nested(self) -> None:
        node = MapNode(CarryOne(), iterfield=["files"], nested=True, name=self._name("nested"))
        port = self._port(lambda p: _depth(p.shape) >= 2)
        if port is None:
            node.inputs.files = [self._some(1 + self.pick(2)), self._some(2)]
            shape = [[None] * len(item) for item in node.inputs.files]
        else:
            self.workflow.connect(port.node, port.output, node, "files")
            shape = port.shape
        more = self._more(node)
        self.workflow.add_nodes([] if port or more else [node])
        self._add(node, "out_file", shape, port, more)

    def _each(self) -> None:
        port = self._port(lambda p: p.shape is not None)
        node = Node(CarryEach(), name=self._name("each"))
        self.workflow.connect(port.node, port.output, node, "files")
        self._add(node, "out_files", [None] * len(port.shape), port, self._more(node))

    def _multi(self) -> None:
        port = self._port()
        node = Node(CarryMulti(), name=self._name("multi"))
        self.workflow.connect(port.node, port.output, node, "files")
        n = 1 if port.shape is None else len(port.shape)
        self._add(node, "out_files", None if n == 1 else [None] * n, port)

    def _folds(self) -> Any:
        port = self._port(lambda p: p.shape is not None and len(p.shape) >= 2)
        if port is None:
            return False
        n = len(port.shape)
        k = 2 + self.pick(n - 1)
        node = Node(CarryFolds(labels=list("gbdafceh" * 4)[:n], k=k), name=self._name("folds"))
        if n > 8:
            return False
        self.workflow.connect(port.node, port.output, node, "files")
        self._add(node, "out_files", [None] * k, port)
        return True

    def _merge(self) -> None:
        ports = [self._port() for _ in range(1 + self.pick(3))]
        flat, ravel = bool(self.pick(3)), not self.pick(4)
        side = not self.pick(4) and len({len(p.shape or [None]) for p in ports}) == 1
        axis = "hstack" if side else "vstack"
        merge = Merge(len(ports), axis=axis, no_flatten=not flat, ravel_inputs=ravel)
        node = Node(merge, name=self._name("merge"))
        for i, port in enumerate(ports, 1):
            self.workflow.connect(port.node, port.output, node, f"in{i}")
        shape: list[Any] = []
        if side:
            rows = [port.shape or [None] for port in ports]
            shape = [list(column) for column in zip(*rows, strict=True)]
        else:
            for port in ports:
                if port.shape is None or not flat:
                    shape.append(port.shape)
                else:
                    shape += _flat(port.shape) if ravel else port.shape
        self._add(node, "out", shape, *ports)

    def _select(self) -> None:
        port = self._port(lambda p: p.shape is not None)
        n = len(port.shape)
        index = [self.pick(2 * n) - n for _ in range(1 + self.pick(3))]
        node = Node(Select(index=index), name=self._name("select"))
        self.workflow.connect(port.node, port.output, node, "inlist")
        shape = [port.shape[i] for i in index]
        self._add(node, "out", shape[0] if len(shape) == 1 else shape, port)

    def _split(self) -> Any:
        port = self._port(lambda p: p.shape is not None and len(p.shape) >= 2)
        if port is None:
            return False
        cut = 1 + self.pick(len(port.shape) - 1)
        squeeze = bool(self.pick(2))
        sizes = [cut, len(port.shape) - cut]
        node = Node(Split(splits=sizes, squeeze=squeeze), name=self._name("split"))
        self.workflow.connect(port.node, port.output, node, "inlist")
        for output, shape in (("out1", port.shape[:cut]), ("out2", port.shape[cut:])):
            self._add(node, output, shape[0] if squeeze and len(shape) == 1 else shape, port)
        return True

    def _rename(self) -> None:
        port = self._port(lambda p: _depth(p.shape) <= 1)
        node: Any
        if port.shape is None:
            node = Node(Rename(format_string="new.txt"), name=self._name("rename"))
        else:
            node = MapNode(
                Rename(format_string="new.txt"), iterfield=["in_file"], name=self._name("rename")
            )
        self.workflow.connect(port.node, port.output, node, "in_file")
        self._add(node, "out_file", port.shape, port)

    def _identity(self) -> None:
        port = self._port()
        node = Node(IdentityInterface(["x"]), name=self._name("same"))
        shape = self._connect(port, node, "x")
        self._add(node, "x", shape, port)

    def _iterate(self) -> Any:
        if self._iterated == 2:
            return False
        name, (one, other) = f"start{self._iterated}", self._some(2)
        kind = self.pick(4)
        self._iterated += 1
        node = Node(IdentityInterface(["x", "y"]), name=name)
        node.inputs.y = self._some(1)[0]
        earlier = next(
            (p for p in self._ports if p.node.name == "start0" and p.output == "x"), None
        )
        if kind == 0 and earlier is not None:  # what it iterates over depends on another iterable
            node = Node(IdentityInterface(["k", "x"]), name=name)
            node.itersource = ("start0", "x")
            values = earlier.node.iterables[0][1]
            node.iterables = [("x", {value: self._some(2) for value in values})]
            self.workflow.connect(earlier.node, "x", node, "k")
            self._add(node, "x", None, earlier).depends = ("start0", name)
            return True
        if kind == 1:
            node.iterables, node.synchronize = [("x", [one, other]), ("y", self._some(2))], True
        elif kind == 2 and self._precise:  # any node may iterate, not an Identity alone
            node = Node(CarryOne(), name=name)
            node.iterables = [("files", [one, other])]
            self._add(node, "out_file", None).depends = (name,)
            return True
        else:
            node.iterables = [("x", [one, other])]
        self._add(node, "x", None).depends = (name,)
        # Without an iterable of its own, y is the same file in every copy.
        self._add(node, "y", None).depends = (name,)
        return True

    def _join(self, *, unique: bool = False) -> Any:
        # The engine drops repeats among files, and fails on lists of them.
        port = self._port(lambda p: bool(p.depends) and not (unique and p.shape))
        if port is None:
            return False
        source, kind = port.depends[-1], self.pick(4)
        interface: Any
        if kind == 0:
            interface, field, output, shape = CarryOne(), "files", "out_file", None
        elif kind == 1:
            interface, field, output, shape = CarryEach(), "files", "out_files", [None, None]
        elif kind == 2:
            interface, field, output = Merge(1), "in1", "out"
            shape = [port.shape, port.shape]
        else:
            interface, field, output = IdentityInterface(["xs"]), "xs", "xs"
            shape = [port.shape, port.shape]
        node = JoinNode(
            interface, joinsource=source, joinfield=field, unique=unique, name=self._name("join")
        )
        self.workflow.connect(port.node, port.output, node, field)
        self._add(node, output, shape, port).depends = port.depends[:-1]
        if unique and shape is not None:
            self._ports.pop()  # of what length it really is, is not followed here
        return True

    def _inner(self) -> None:
        """A nested workflow, and perhaps its clone behind it."""
        port = self._port(lambda p: p.shape is not None)
        inner = Engine(self._name("inner"))
        start, end = (Node(IdentityInterface(["x"]), name=n) for n in ("inputnode", "outputnode"))
        middle = MapNode(CarryOne(), iterfield=["files"], name="middle")
        middle.inputs.more = self._some(1)[0]
        inner.connect([(start, middle, [("x", "files")]), (middle, end, [("out_file", "x")])])
        self.workflow.connect(port.node, port.output, inner, "inputnode.x")
        made = self._add(inner, "outputnode.x", [None] * len(port.shape), port)
        if self.pick(2):
            again = inner.clone(self._name("again"))
            self.workflow.connect(inner, "outputnode.x", again, "inputnode.x")
            self._add(again, "outputnode.x", made.shape, made)

    # -- constructs that the graph cannot look into

    def _function(self) -> None:
        port = self._port()
        node = Node(function(blend, "a", "b"), name=self._name("blend"))
        if self.pick(2):
            node.inputs.b = {"of": self._some(1)[0]}
        self._connect(port, node, "a")
        self._add(node, "out", None, port)

    def _apart(self) -> None:
        port, n = self._port(), 2 + self.pick(2)
        node = Node(function(apart, "a", "n"), name=self._name("apart"))
        node.inputs.n = n
        self.workflow.connect(port.node, port.output, node, "a")
        self._add(node, "out", [None] * n, port)

    def _map_apart(self) -> Any:
        port = self._port(lambda p: p.shape is not None)
        node = MapNode(function(apart, "a", "n"), iterfield=["a"], name=self._name("mapart"))
        node.inputs.n = 2
        shape = self._connect(port, node, "a")
        self._add(node, "out", [[None, None] for _ in shape or [None]], port)

    def _foreign(self) -> None:
        port = self._port(lambda p: p.shape is not None)
        node = Node(ForeignEach(), name=self._name("foreign"))
        self.workflow.connect(port.node, port.output, node, "files")
        self._add(node, "out_files", [None] * len(port.shape), port, self._more(node))

    def _late_select(self) -> Any:
        port = self._port(lambda p: p.shape is not None and len(p.shape) >= 2)
        if port is None:
            return False
        node = Node(Select(index=[0]), name=self._name("late"))
        which = Node(function(place, "a"), name=self._name("which"))
        which.inputs.a = 3
        self.workflow.connect(
            [(which, node, [("out", "index")]), (port.node, node, [(port.output, "inlist")])]
        )
        self._add(node, "out", port.shape[1], port)
        return True

    def _unique(self) -> Any:
        return self._join(unique=True)

    def _hand_on(self) -> None:
        port = self._port()
        node = Node(function(handed_on, "a", "n"), name=self._name("hand"))
        self._connect(port, node, "a")
        # What a connection function made of the list is not followed here.
        self._ports.append(Port(node, "out", port.shape, port.depends)) if not any(
            isinstance(c[0], tuple)
            for *_, data in self.workflow._graph.in_edges(node, data=True)
            for c in data["connect"]
        ) else None

    def _sink(self) -> Any:
        """Into a folder, and out again by a grabber that finds what is there."""
        port = self._port(lambda p: p.shape is None and not p.depends)
        if port is None:
            return False
        name = self._name("sink")
        sink = Node(DataSink(base_directory=str(Path.cwd() / name), parameterization=False), name)
        where = Node(function(folder, "a"), name=self._name("where"))
        grab = Node(SelectFiles({"out": "*.txt"}), name=self._name("found"))
        self.workflow.connect(port.node, port.output, sink, "kept")
        self.workflow.connect(
            [
                (sink, where, [("out_file", "a")]),
                (where, grab, [("out", "base_directory")]),
            ]
        )
        self._add(grab, "out", None)
        return True

    # -- extractions

    def _probe(self) -> None:
        """Two extractions, each of every file, in masks that the workflow has made."""
        for _ in range(2):
            port = self._port(lambda p: not p.depends)
            node = MapNode(ForeignValue(), iterfield=["data"], name=self._name("probe"))
            node.inputs.data = list(self._files)
            test = Node(ForeignTest(), name=self._name("test"))
            self.workflow.connect(port.node, port.output, node, "mask")
            self.workflow.connect(node, "out_file", test, "files")
            self.probes.append(node.name)


_PRECISE = (
    *("_literal", "_grab", "_one", "_map", "_nested", "_each", "_multi", "_folds", "_merge"),
    *("_select", "_split", "_rename", "_identity", "_iterate", "_inner", "_nested"),
    *("_iterate", "_join", "_join", "_join", "_merge", "_merge", "_select"),
)
_LOOSE = (
    *("_function", "_apart", "_map_apart", "_foreign", "_late_select", "_unique", "_hand_on"),
    *("_sink", "_unique", "_sink"),
)
CONSTRUCTS = {name.strip("_") for name in (*_PRECISE, *_LOOSE)} | {"connection function"}
