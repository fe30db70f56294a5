"""Interfaces around `comparisons`: regions or conditions against each other, in the same people."""

from __future__ import annotations

from dataclasses import asdict
from pathlib import Path
from typing import Any

import numpy as np
import numpy.typing as npt
from nipype.interfaces.base import File

from ..comparisons import difference, equivalence, interaction, repeated_measures
from ..errors import InputError
from ..roi import per_person
from ..rules import Statistic, only
from .base import InputSpec, SequesterInterface, TraitedSpec, read_json, traits, write_json

Floats = npt.NDArray[np.float64]

KINDS = ("difference", "equivalence", "anova", "interaction")


class _CompareInput(InputSpec):
    kind = traits.Enum(*KINDS, mandatory=True, desc="what is asked of the regions")
    names = traits.List(traits.Str, mandatory=True, desc="the regions, in order")
    smallest = traits.Float(0.0, usedefault=True, desc="smallest effect of interest (equivalence)")
    factors = traits.List(traits.List(traits.Str), desc="levels of the two factors (interaction)")


class _CompareOutput(TraitedSpec):
    record_file = File(exists=True, desc="the comparison, as JSON")


class _Compare(SequesterInterface):
    """What both comparisons share: from values to the record."""

    def _record(
        self, cwd: Path, observed: Floats, flipped: Floats | None, *, exact: bool
    ) -> dict[str, Any]:
        kind, names = self.inputs.kind, self.inputs.names
        more: dict[str, Any] = {}
        made: Any
        if kind == "difference":
            made = difference(observed, names, flipped, exact=exact)
        elif kind == "equivalence":
            made = equivalence(observed, names, self.inputs.smallest, flipped, exact=exact)
        elif kind == "anova":
            made = repeated_measures(observed, names, flipped, exact=exact)
        else:
            one, other = self.inputs.factors
            whole = interaction(observed, (one, other), flipped, exact=exact)
            made = whole.interaction
            simple = zip(whole.simple, whole.simple_p, strict=True)
            more = {"simple": [{**asdict(effect), "p_holm": p} for effect, p in simple]}
        record = {"kind": kind, "regions": names, **asdict(made), **more}
        return {"record_file": write_json(cwd / "comparison.json", record)}


class _HeldOutInput(_CompareInput):
    values_files = traits.List(
        File(exists=True), mandatory=True, desc="per region: FlipTest's values, kept"
    )
    record_files = traits.List(File(exists=True), mandatory=True, desc="per region: its record")


class CompareHeldOut(_Compare):
    """Regions of cross-fitted plans against each other, under flips of all of them together."""

    input_spec = _HeldOutInput
    output_spec = _CompareOutput
    touch_rules = {"record_file": only("values_files", "record_files")}
    statistic = Statistic(values="values_files", cross_fitted=True)

    def _work(self, cwd: Path) -> dict[str, Any]:
        values = [np.load(path, allow_pickle=False) for path in self.inputs.values_files]
        records = [read_json(path) for path in self.inputs.record_files]
        shapes = {table.shape for table in values}
        exact = {record["p_error"] is None for record in records}
        if len(shapes) > 1 or len(exact) > 1:
            raise InputError(
                "regions that were not flipped together",
                expected="the same subjects, seed and number of flips for all regions",
                got=", ".join(
                    f"{n - 1} flips of {m} subjects" for n, m in (t.shape for t in values)
                ),
            )
        together = np.stack(values, axis=2)  # (1 + n_flips, n_people, n_regions)
        return self._record(cwd, together[0], together[1:], exact=exact.pop())


class _FixedInput(_CompareInput):
    values = traits.List(
        traits.List(traits.Float), mandatory=True, desc="per region: its extracted values"
    )
    labels = traits.List(traits.Str, mandatory=True, desc="the people, sorted")
    row_labels = traits.List(
        traits.List(traits.Str), mandatory=True, desc="per region and value: who it belongs to"
    )


class CompareFixed(_Compare):
    """Regions that no fold chose (given, localizers, other runs) against each other."""

    input_spec = _FixedInput
    output_spec = _CompareOutput
    touch_rules = {"record_file": only("values")}
    statistic = Statistic(
        values="values",
        labels="labels",
        cure="compare the regions of folded plans with CompareHeldOut, which flips them together",
    )

    def _work(self, cwd: Path) -> dict[str, Any]:
        rows, sizes = self.inputs.row_labels, [len(v) for v in self.inputs.values]
        if [len(labels) for labels in rows] != sizes:
            raise InputError(
                "labels that do not go with the values",
                where="row_labels",
                expected=f"a label for every value of each region: {_numbers(sizes)}",
                got=_numbers([len(labels) for labels in rows]),
                remedy="give row_labels in the order of values: per region, whose each value is",
            )
        if any(sorted(set(labels)) != self.inputs.labels for labels in rows):
            raise InputError(
                "regions of different people",
                where="row_labels",
                expected=", ".join(self.inputs.labels[:5]),
                remedy="compare regions that the same subjects were tested in",
            )
        columns = [per_person(v, r) for v, r in zip(self.inputs.values, rows, strict=True)]
        return self._record(cwd, np.array(columns).T, None, exact=False)


def _numbers(sizes: list[int]) -> str:
    return ", ".join(map(str, sizes)) or "none"
