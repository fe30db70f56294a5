"""Speed and memory against the bars of the project, as ratios taken in one run.

    python tests/bench/bench.py [--json FILE] [--quick]

Prints a table and writes JSON. What is compared runs in turn, several times over; a ratio is
the median over the turns, so that a machine that is busy with something else slows both sides.
The exit code is 0 whatever the result: a figure taken on a noisy machine is for reading.
"""

from __future__ import annotations

import argparse
import hashlib
import json
import multiprocessing
import os
import platform
import re
import shutil
import statistics
import subprocess
import sys
import tempfile
import time
import traceback
from collections.abc import Callable, Iterator
from dataclasses import asdict, dataclass
from functools import partial
from importlib.metadata import version
from pathlib import Path
from typing import Any

import data
import naive
import nibabel as nib
import numpy as np
import psutil
from scipy import stats
from sequester.nodes.controlled import Controlled
from sequester.nodes.flips import random_signs
from sequester.nodes.folds import KFold, LeaveOneOut
from sequester.nodes.groupmaps import leave_out_maps
from sequester.nodes.masks import Cluster, MaskRule, PeakSphere, Strongest, Threshold
from sequester.nodes.procedure import Procedure
from sequester.nodes.space import Grid

FLIPS, NAIVE_FLIPS = 1000, 3  # the naive loop takes seconds a flip: 3 stand for 1,000
MB = 1e6
Rule = Threshold | Cluster


@dataclass(frozen=True)
class Row:
    """One line of the table.

    Parameters
    ----------
    part, what : str
    value : float
        In `unit`.
    bar : float or None
        None for a figure that is there for information.
    most : bool
        Whether the value may be at most the bar (else it must be at least that).
    """

    part: str
    what: str
    value: float
    unit: str
    bar: float | None = None
    most: bool = True
    note: str = ""

    @property
    def met(self) -> bool | None:
        """Whether the bar is met; None without one."""
        if self.bar is None:
            return None
        return self.value <= self.bar if self.most else self.value >= self.bar


def seconds(work: Callable[[], Any]) -> float:
    """How long a call takes."""
    start = time.perf_counter()
    work()
    return time.perf_counter() - start


def in_turn(works: dict[str, Callable[[], Any]], turns: int) -> dict[str, list[float]]:
    """Seconds of each work in each turn, after one unmeasured turn of the first."""
    next(iter(works.values()))()
    spent: dict[str, list[float]] = {name: [] for name in works}
    for _ in range(turns):
        for name, work in works.items():
            spent[name].append(seconds(work))
    return spent


def ratio(over: list[float], under: list[float]) -> float:
    """The median over turns of one time over another."""
    return statistics.median(a / b for a, b in zip(over, under, strict=True))


# -- all leave-one-out maps -----------------------------------------------------------------


def maps(x: np.ndarray, turns: int) -> Iterator[Row]:
    """All 26 t maps in one pass, against one pass and against loops over the folds."""
    folds = LeaveOneOut().folds(data.LABELS)
    spent = in_turn(
        {
            "ours": lambda: leave_out_maps(x, folds),
            "plain": lambda: naive.plain_pass(x),
            "scipy": lambda: stats.ttest_1samp(x, 0),
            "loop of plain": lambda: naive.loop_of_plain(x),
            "loop of scipy": lambda: naive.loop_of_scipy(x),
        },
        turns,
    )
    ours = spent["ours"]
    note = f"{statistics.median(ours) * 1e3:.0f} ms for all 26 maps"
    part = "26 leave-one-out t maps"
    yield Row(part, "cost in plain mean/sd passes", ratio(ours, spent["plain"]), "x", 12, note=note)
    yield Row(part, "cost in one-sample t-tests of SciPy", ratio(ours, spent["scipy"]), "x", 1.3)
    for loop, bar in (("plain", 3), ("scipy", 15)):
        faster = ratio(spent[f"loop of {loop}"], ours)
        yield Row(part, f"faster than the loop of {loop} over folds", faster, "x", bar, most=False)
    exact = naive.loop_of_scipy(x.astype(np.float64))
    worst = float((np.abs(leave_out_maps(x, folds) - exact) / np.abs(exact)).max())
    yield Row(part, "worst relative deviation from float64 SciPy", worst, "", 1e-5)


# -- what is held out cannot matter ---------------------------------------------------------


def perturbed(x: np.ndarray, inside: np.ndarray, which: list[int]) -> Iterator[Row]:
    """A fold's mask, when its held-out map is replaced by anything."""
    space = data.grid(inside)
    other = np.random.default_rng(1).standard_normal(x.shape[1], dtype=np.float32)
    for rule in rules():
        procedure = Procedure(rule)
        plain = procedure.prepare(x, data.LABELS, space).masks()
        changed = cases = 0
        for fold in which:
            for stand_in in (np.nan, np.float32(1e30), other):
                altered = x.copy()
                altered[fold] = stand_in
                masks = procedure.prepare(altered, data.LABELS, space).masks()
                # That other folds do notice is what makes the comparison mean something.
                assert any((a != b).any() for a, b in zip(masks, plain, strict=True))
                changed += not np.array_equal(masks[fold], plain[fold])
                cases += 1
        what = f"masks that changed, of {cases}, by {name_of(rule)}"
        yield Row("held-out map replaced", what, changed, "", 0, note="NaN, 1e30, another map")


def rules() -> list[Rule]:
    """The two mask rules of the other bars."""
    return [Threshold(p=0.001), Cluster(p=0.001, min_size=10)]


def name_of(rule: Rule) -> str:
    """A rule in a word or two."""
    return f"{'cluster' if isinstance(rule, Cluster) else 'threshold'} p = {rule.p:g}"


# -- flips of the whole procedure -----------------------------------------------------------


# The largest share of the features that a rule with a bar chooses: as many as p < .01 by chance.
_MOST_CHOSEN = 0.01


def bar_of(rule: MaskRule) -> int | None:
    """How many times faster than the naive loop 1,000 flips by a rule must be."""
    if isinstance(rule, Strongest) and rule.fraction > _MOST_CHOSEN:
        return None  # the table shows what such large regions cost
    return 100 if isinstance(rule, Cluster) else 500


def flips(x: np.ndarray, inside: np.ndarray, turns: int) -> Iterator[Row]:
    """1,000 flips, the making ready included, against SciPy in a loop over folds and flips."""
    space = data.grid(inside)
    for name, rule in every_rule().items():
        yield _flips(x, space, turns, name, rule)


def _flips(x: np.ndarray, space: Grid, turns: int, name: str, rule: MaskRule) -> Row:
    loop = naive.Loop(rule, space)
    ours, theirs = [], []
    for signs in random_signs(1, data.LABELS, 0, turns):
        start = time.perf_counter()
        Procedure(rule).prepare(x, data.LABELS, space).flip_test(FLIPS, seed=1)
        ours.append(time.perf_counter() - start)
        if loop.by_flips:
            # Once for all flips; so many folds, as if they had been found.
            once = loop.by_flips.n_flips * seconds(partial(loop.extremes, x, signs))
            loop.settled = [5.0] * len(x)
        else:
            once = 0.0
        theirs.append(once + FLIPS * seconds(partial(loop.one_flip, x, signs)))
    note = (
        f"{statistics.median(ours) / FLIPS * 1e3:.2f} ms a flip; "
        f"the naive loop {statistics.median(theirs) / FLIPS:.2f} s a flip"
    )
    what = f"faster than the naive loop, by {name}"
    return Row("1,000 flips", what, ratio(theirs, ours), "x", bar_of(rule), most=False, note=note)


def same_as_naive(x: np.ndarray, inside: np.ndarray) -> Iterator[Row]:
    """Masks and values under flips, against the naive loop in float64."""
    space, exact = data.grid(inside), x.astype(np.float64)
    for name, rule in every_rule(n_flips=19).items():
        loop, ready = naive.Loop(rule, space), Procedure(rule).prepare(x, data.LABELS, space)
        loop.settle(exact, data.LABELS)
        wrong, chosen, worst = 0, 0, 0.0
        for signs in random_signs(1, data.LABELS, 0, NAIVE_FLIPS):
            masks, values = loop.one_flip(exact, signs)
            outcome = ready.outcome(signs)
            # As many flips are made: nothing is looked at in full.
            ((found, read),) = ready._each(signs[None])
            ours = np.zeros_like(masks)
            ours[:, found.features] = found.members.T
            assert outcome.sizes == tuple(ours.sum(axis=1).tolist())
            assert outcome.values == tuple(read.tolist())
            if not loop.by_flips:
                # A flip of the data and a flip of the signs are one thing.
                flipped = x * signs.astype(x.dtype)[:, None]
                again = Procedure(rule).prepare(flipped, data.LABELS, space)
                assert np.array_equal(np.stack(again.masks()), ours)
                assert again.outcome().values == outcome.values
            wrong += int((ours != masks).sum())
            chosen += int(masks.sum())
            worst = max(worst, float(np.abs(np.subtract(outcome.values, values)).max()))
        part = "flips against float64"
        note = f"{chosen} chosen in {NAIVE_FLIPS} flips x 26 folds"
        yield Row(part, f"features that differ, by {name}", wrong, "", 0, note=note)
        yield Row(part, f"worst deviation of a value, by {name}", worst, "", 1e-6)


# -- every rule, and many subjects ----------------------------------------------------------


def every_rule(n_flips: int = 999) -> dict[str, MaskRule]:
    """A rule of each kind, with each control."""
    by = partial(Controlled, n_flips=n_flips)
    return {
        "threshold p = 0.001": Threshold(p=0.001),
        "threshold p = 0.01": Threshold(p=0.01),
        "cluster p = 0.001, largest": Cluster(p=0.001, min_size=10),
        "cluster p = 0.01, largest": Cluster(p=0.01, min_size=10),
        "cluster p = 0.01, peak": Cluster(p=0.01, pick="peak"),
        "strongest 50": Strongest(k=50),
        "strongest 200": Strongest(k=200),
        "strongest 50 means": Strongest(k=50, map_kind="mean"),
        "strongest 1 %": Strongest(fraction=0.01),
        "strongest 1 % means": Strongest(fraction=0.01, map_kind="mean"),
        "strongest 5 %": Strongest(fraction=0.05),
        "strongest 5 % means": Strongest(fraction=0.05, map_kind="mean"),
        "peak sphere 6 mm": PeakSphere(radius=6.0),
        "Bonferroni": Threshold(control=by("bonferroni")),
        "Benjamini-Hochberg": Threshold(control=by("benjamini-hochberg")),
        f"max-t, {n_flips} flips": Threshold(control=by("max-t")),
        "random field": Threshold(control=by("random-field")),
        f"cluster extent by {n_flips} flips": Cluster(p=0.001, extent=by("max-cluster")),
        "cluster extent by random field": Cluster(p=0.001, extent=by("random-field")),
    }


def small_region(x: np.ndarray, inside: np.ndarray, *, quick: bool) -> Iterator[Row]:
    """10,000 flips in the 5,000 features nearest to the middle, in processor seconds.

    Not by the clock: one process on one core, of a machine that may have others to serve.
    """
    space, n = data.grid(inside), 1000 if quick else 10_000
    mm = space.coordinates()
    apart = np.linalg.norm(mm - mm.mean(axis=0), axis=1)
    near = np.zeros(space.n_features, bool)
    near[np.argsort(apart, kind="stable")[:5000]] = True
    some, region = np.ascontiguousarray(x[:, near]), space.restricted(near)
    for name, rule in every_rule().items():
        for scheme in (LeaveOneOut(), KFold(5)):
            start = time.process_time()
            Procedure(rule, scheme).prepare(some, data.LABELS, region).flip_test(n, seed=1)
            spent = (time.process_time() - start) * 10_000 / n
            what = f"{name}, {len(scheme.folds(data.LABELS))} folds"
            yield Row("10,000 flips in 5,000 features", what, spent, "s", 10)


def many(n: int, rule: MaskRule, flips: int) -> tuple[float, float]:
    """Processor seconds of flips of n subjects with 5 folds, and MB above the stack."""
    inside = data.brain()
    rng, x = np.random.default_rng(0), np.empty((n, data.N_FEATURES), np.float32)
    for row in x:
        rng.standard_normal(dtype=np.float32, out=row)
    held = psutil.Process().memory_info().rss
    labels = [f"{i:04}" for i in range(n)]
    start = time.process_time()
    ready = Procedure(rule, KFold(5)).prepare(x, labels, data.grid(inside), copy=False)
    ready.flip_test(flips, seed=1)
    spent = time.process_time() - start
    # Of this program alone: `getrusage` counts that of the one which started it.
    peak = re.search(r"VmHWM:\s*(\d+) kB", Path("/proc/self/status").read_text())
    assert peak
    return spent, (int(peak[1]) * 1024 - held) / MB


def many_subjects(*, quick: bool) -> Iterator[Row]:
    """Whole-brain flips of 250 and of 500 subjects: linear in time, no more memory."""
    flips = 100 if quick else FLIPS
    for name in ("threshold p = 0.001", "cluster p = 0.001, largest", "strongest 200"):
        found = []
        for n in (250, 500):
            with multiprocessing.get_context("spawn").Pool(1) as pool:
                found.append(pool.apply(many, (n, every_rule()[name], flips)))
        (time_250, above_250), (time_500, above_500) = found
        part, note = f"500 subjects, 5 folds, {name}", f"{time_500 / flips * 1e3:.1f} ms a flip"
        yield Row(part, "time over twice that of 250", time_500 / time_250 / 2, "x", 1.3, note=note)
        note = f"{above_250:.0f} MB with 250; the stack {500 * data.N_FEATURES * 4 / MB:.0f} MB"
        yield Row(part, "peak above the stack", above_500, "MB", 100, note=note)


# -- the command ----------------------------------------------------------------------------


def decode(paths: list[Path]) -> None:
    """Load every map, as any program must."""
    for path in paths:
        np.asarray(nib.load(path).dataobj)


def hashed(paths: list[Path]) -> None:
    """The digest of every file."""
    for path in paths:
        hashlib.sha256(path.read_bytes()).hexdigest()


def peak_of(command: list[str]) -> tuple[float, float]:
    """The peaks of RSS and PSS, summed over a command's processes, in MB."""
    rss = pss = 0.0
    process = psutil.Popen(command, stdout=subprocess.DEVNULL)
    while process.poll() is None:
        try:
            used = [p.memory_full_info() for p in [process, *process.children(recursive=True)]]
        except psutil.Error:
            continue  # one of them ended meanwhile
        rss = max(rss, sum(m.rss for m in used) / MB)
        pss = max(pss, sum(getattr(m, "pss", m.rss) for m in used) / MB)
        time.sleep(0.02)
    if process.returncode:
        raise RuntimeError(f"{' '.join(command)} ended with exit code {process.returncode}")
    return rss, pss


def command(x: np.ndarray, inside: np.ndarray, turns: int) -> Iterator[Row]:
    """`sequester run` on the study's files."""
    program = shutil.which("sequester", path=str(Path(sys.executable).parent))
    if program is None:
        raise RuntimeError("no `sequester` beside this Python: install the project first")
    with tempfile.TemporaryDirectory() as name:
        folder = Path(name)
        paths = data.write_study(folder, x, inside)
        for rule in rules():
            kind = "cluster" if isinstance(rule, Cluster) else "threshold"
            size = ", min_size = 10" if kind == "cluster" else ""
            text = f'{{ kind = "{kind}", p = {rule.p}{size} }}'
            toml = folder / f"{kind}.toml"
            toml.write_text(data.STUDY.format(rule=text, flips=FLIPS))
            yield from _one_command(program, toml, paths, f"sequester run, {name_of(rule)}", turns)


def _one_command(
    program: str, toml: Path, paths: list[Path], part: str, turns: int
) -> Iterator[Row]:
    line = [program, "run", str(toml), "--quiet"]
    spent_on = in_turn(
        {
            "decode": lambda: decode(paths),
            "hash": lambda: hashed(paths),
            "run": lambda: subprocess.run(line, check=True, stdout=subprocess.DEVNULL),
        },
        turns,
    )
    decoding, walls = spent_on["decode"], spent_on["run"]
    over = statistics.median(w - 3 * d for w, d in zip(walls, decoding, strict=True))
    note = f"wall {statistics.median(walls):.1f} s, decode {statistics.median(decoding):.2f} s"
    yield Row(part, "wall less 3 x decode", over, "s", 8, note=note)
    rss, pss = peak_of(line)
    note = f"PSS {pss:.0f} MB"
    yield Row(part, "peak RSS of the process tree", rss, "MB", 1000, note=note)
    yield Row(part, "decode the 26 maps once, plain loop", statistics.median(decoding), "s")
    yield Row(part, "hash the 26 files once, plain loop", statistics.median(spent_on["hash"]), "s")
    script = Path(__file__).with_name("stages.py")
    start = time.perf_counter()
    done = subprocess.run(
        [sys.executable, str(script), str(toml)], capture_output=True, text=True, check=True
    )
    whole = time.perf_counter() - start
    spent: dict[str, float] = json.loads(done.stderr.splitlines()[-1])
    spent["start and exit of the interpreter"] = whole - sum(spent.values())
    for stage, time_there in sorted(spent.items(), key=lambda item: -item[1]):
        note = f"{time_there / whole:.0%} of {whole:.1f} s, a run with clocks"
        yield Row(part, f"of which {stage}", time_there, "s", note=note)


# -- the table ------------------------------------------------------------------------------


def machine() -> dict[str, Any]:
    """What the figures were taken on."""
    names = ("sequester", "numpy", "scipy", "nibabel", "nipype")
    return {
        "cores": os.cpu_count(),
        "load": round(os.getloadavg()[0], 2),
        "threads": os.environ.get("OMP_NUM_THREADS", "default"),
        "python": platform.python_version(),
        **{name: version(name) for name in names},
    }


def shown(row: Row) -> list[str]:
    """A row's cells."""
    verdict = {True: "met", False: "MISSED", None: ""}[row.met]
    bar = "" if row.bar is None else f"{'<=' if row.most else '>='} {row.bar:g}"
    return [row.part, row.what, f"{row.value:.3g} {row.unit}".strip(), bar, verdict, row.note]


def measured(*, quick: bool) -> Iterator[Row]:
    """All rows, one by one as they are known; a part that fails is a bar missed."""
    inside = data.brain()
    x = data.effects(inside)
    turns, few = (1, 1) if quick else (5, 3)
    parts: list[Callable[[], Iterator[Row]]] = [
        lambda: maps(x, turns),
        lambda: perturbed(x, inside, [3] if quick else [0, 13, 25]),
        lambda: same_as_naive(x, inside),
        lambda: flips(x, inside, few),
        lambda: small_region(x, inside, quick=quick),
        lambda: many_subjects(quick=quick),
        lambda: command(x, inside, few),
    ]
    for part in parts:
        try:
            yield from part()
        except Exception as error:  # the other parts are measured all the same; this one fails
            traceback.print_exc()
            yield Row("failed", f"{type(error).__name__}: {error}", 1, "", 0)


def main() -> None:
    """Measure, print, write."""
    parser = argparse.ArgumentParser(description=__doc__.splitlines()[0])
    parser.add_argument("--json", type=Path, default=Path("bench-results.json"), metavar="FILE")
    parser.add_argument("--quick", action="store_true", help="one turn of everything")
    options = parser.parse_args()
    about = machine()
    print(", ".join(f"{name} {value}" for name, value in about.items()))
    print(f"N = {data.N_SUBJECTS}, {data.N_FEATURES} features, float32\n")
    rows, widths = [], (34, 53, 9, 8, 6, 0)
    for row in measured(quick=options.quick):
        rows.append(row)
        cells = zip(shown(row), widths, strict=True)
        print(" ".join(cell.ljust(width) for cell, width in cells).rstrip(), flush=True)
    barred = [row for row in rows if row.met is not None]
    met = sum(bool(row.met) for row in barred)
    plain = [asdict(row) | {"met": row.met} for row in rows]
    options.json.write_text(json.dumps({"machine": about, "rows": plain}, indent=2) + "\n")
    print(f"\n{met} of {len(barred)} bars met; written to {options.json}")


if __name__ == "__main__":
    main()
