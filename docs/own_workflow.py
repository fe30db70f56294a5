"""sequester inside a nipype workflow of one's own, on the data of `sequester demo`.

Run it beside the demo's folder:  python docs/own_workflow.py sequester-demo
"""

import json
import sys
import tempfile
from pathlib import Path

from nipype import Function, JoinNode, Node, SelectFiles, Workflow
from nipype.interfaces.utility import IdentityInterface
from sequester import Cluster, GuardPlugin, Procedure, leave_one_subject_out, read_table


def average(files):
    """The mean of a subject's runs: a step of one's own, which the guard need not know."""
    from pathlib import Path

    import nibabel as nib
    import numpy as np

    images = [nib.load(file) for file in files]
    mean = np.mean([image.get_fdata(dtype=np.float32) for image in images], axis=0)
    out = Path("mean.nii.gz").absolute()
    nib.Nifti1Image(mean, images[0].affine).to_filename(out)
    return str(out)


def main(folder: Path) -> dict[str, object]:
    """Build the workflow, run it under the guard, return the record of the region."""
    study = read_table(folder / "table.tsv")
    subjects = sorted({row.unit.sub for row in study.rows})
    # Who counts as one: the exchange column, or the subject.
    labels = [next(row.person for row in study.rows if row.unit.sub == sub) for sub in subjects]

    with tempfile.TemporaryDirectory() as work:
        workflow = Workflow(name="garden", base_dir=work)
        workflow.config["execution"] = {"crashdump_dir": work, "create_report": "false"}
        each = Node(IdentityInterface(["sub"]), name="each")
        each.iterables = ("sub", subjects)
        grab = Node(SelectFiles({"runs": "maps/sub-{sub}/*.nii.gz"}), name="grab")
        grab.inputs.base_directory = str(folder.absolute())
        first_level = Node(Function(["files"], ["effect_map"], average), name="first_level")
        everybody = JoinNode(
            IdentityInterface(["maps"]), joinsource="each", joinfield="maps", name="everybody"
        )
        rule = Cluster(p=0.001, connectivity=18, min_size=10, pick="largest")
        arbor = leave_one_subject_out("arbor", Procedure(rule), labels, n_flips=199, seed=7)
        workflow.connect(
            [
                (each, grab, [("sub", "sub")]),
                (grab, first_level, [("runs", "files")]),
                (first_level, everybody, [("effect_map", "maps")]),
                (everybody, arbor, [("maps", "inputnode.effects")]),
            ]
        )
        guard = GuardPlugin(study)
        graph = workflow.run(plugin=guard)  # judges, then runs; or refuses
        (test,) = [node for node in graph.nodes() if node.name == "test"]
        record = json.loads(Path(test.result.outputs.record_file).read_text())
    print(record["sentence"])
    print("guard:", ", ".join(sorted({f"{f.verdict} ({f.level})" for f in guard.findings})))
    return record


if __name__ == "__main__":
    main(Path(sys.argv[1] if len(sys.argv) > 1 else "sequester-demo"))
