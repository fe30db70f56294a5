"""Imports run downward only: numerics know no files and no engine, nodes know no workflows."""

import ast
from pathlib import Path

import pytest
import sequester.nodes
import sequester.workflows

NODES = Path(sequester.nodes.__file__).parent
WORKFLOWS = Path(sequester.workflows.__file__).parent

# Lowest first; a module imports from modules before it only.
NODE_LAYERS = [
    "errors", "power", "progress", "products", "touch", "rules", "scoreunits", "space", "regrid",
    "likeness", "folds", "flips", "subjects", "groupmaps", "smoothness", "randomfield",
    "design", "orthogonality", "controlled", "contour", "masks", "regions", "roi",
    "reliability", "familywise", "parcels", "foldnull", "presence", "pages", "foldstack",
    "leading", "signed", "scored", "adjusted", "choosing", "foldsmooth", "foldcontrol",
    "compared", "models", "exchange",
    "procedure", "simulated", "nullsets", "results", "comparisons", "heldout", "fixed",
    "images", "storedmaps", "interfaces",
]  # fmt: skip
WORKFLOW_LAYERS = [
    "digests", "study", "twins", "states", "literals", "scorelists", "inlined", "ancestry",
    "caches", "findings", "statistics", "untold", "judge", "unitsets", "prov", "record", "engines",
    "keys", "selection", "regions", "plans", "around", "certificates", "ledger", "lineage",
    "rois", "comparisons", "settings", "origins", "build", "collect", "looks", "graphledger",
    "guard", "contours", "pictures", "staging", "outputs", "verify", "report", "run", "curves",
    "planning", "measured", "trials", "kept", "calibrate", "table", "demo", "show", "scripts",
    "cli",
]  # fmt: skip

REPORT_LAYERS = [
    "folder", "words", "stated", "methods", "notebook", "drawing", "effects", "slices", "touchmap",
    "graphmap", "page", "refused",
]  # fmt: skip


def imports_of(path):
    """(relative level, first name) of every import in a file, wherever it stands."""
    for item in ast.walk(ast.parse(path.read_text())):
        if isinstance(item, ast.Import):
            for alias in item.names:
                yield 0, alias.name.split(".")[0]
        elif isinstance(item, ast.ImportFrom):
            yield item.level, (item.module or item.names[0].name).split(".")[0]


def modules(folder):
    return {path.stem: path for path in folder.glob("*.py") if path.stem != "__init__"}


def test_every_module_has_its_layer():
    assert sorted(modules(NODES)) == sorted(set(NODE_LAYERS) - {"interfaces"})
    assert sorted(modules(WORKFLOWS)) == sorted(set(WORKFLOW_LAYERS) - {"report"})
    assert sorted(modules(WORKFLOWS / "report")) == sorted(REPORT_LAYERS)


@pytest.mark.parametrize(("folder", "layers"), [(NODES, NODE_LAYERS), (WORKFLOWS, WORKFLOW_LAYERS)])
def test_modules_import_downward_only(folder, layers):
    for name, path in modules(folder).items():
        for level, module in imports_of(path):
            if level == 1:
                assert layers.index(module) < layers.index(name), f"{name} imports {module}"


def test_the_report_imports_from_below_it_only():
    below = WORKFLOW_LAYERS[: WORKFLOW_LAYERS.index("report")]
    for name, path in modules(WORKFLOWS / "report").items():
        for level, module in imports_of(path):
            if level == 1:
                assert REPORT_LAYERS.index(module) < REPORT_LAYERS.index(name), f"{name}: {module}"
            assert level != 2 or module in below, f"report/{name} imports {module}"


def test_nodes_never_import_workflows_nor_the_installed_name():
    for path in NODES.rglob("*.py"):
        up = 2 if path.parent == NODES else 3
        for level, module in imports_of(path):
            assert level < up, f"{path.name} imports from above nodes"
            assert module != "sequester" or level, f"{path.name} imports the installed name"


def test_the_engine_is_known_to_interfaces_and_workflows_only():
    for name, path in modules(NODES).items():
        engine = {"nipype", "traits", "networkx"} & {
            m for level, m in imports_of(path) if not level
        }
        assert not engine, f"{name} imports {engine}"


def test_files_are_known_to_images_and_stored_maps_only():
    for name, path in modules(NODES).items():
        if name not in ("images", "storedmaps"):
            found = {"nibabel", "pathlib", "os"} & {m for level, m in imports_of(path) if not level}
            assert not found, f"{name} imports {found}"


def test_starter_names_exist():
    import sequester

    for name in sequester.__all__:
        assert getattr(sequester, name) is not None
    with pytest.raises(AttributeError, match="no attribute 'nothing'"):
        sequester.nothing  # noqa: B018 - looked up to see it fail
