"""The engines that the guard wraps, for tests that must hold on each of them.

A real SLURM of one machine and an IPython cluster are brought up once for the session (fixtures
``slurm`` and ``ipython``, known to every test through conftest.py) and ended with it.

    @pytest.mark.parametrize("engine", ENGINES)
    def test_it(engine, request):
        guard = GuardPlugin(study, **arguments(engine, request))
"""

from __future__ import annotations

import os
import shutil
import subprocess
import tempfile
from collections.abc import Iterator
from contextlib import contextmanager
from pathlib import Path
from typing import Any

import pytest

ENGINES = ("Linear", "MultiProc", "SLURM", "IPython")


def arguments(engine: str, request: pytest.FixtureRequest) -> dict[str, Any]:
    """What GuardPlugin is given for an engine; skips the test where the engine is not up."""
    given: dict[str, dict[str, Any]] = {"Linear": {}, "MultiProc": {"n_procs": 2}}
    if engine in given:
        return {"engine": engine, "plugin_args": given[engine]}
    return {"engine": engine, "plugin_args": request.getfixturevalue(engine.lower())}


@contextmanager
def slurm_cluster() -> Iterator[Path]:
    """A SLURM that takes jobs for as long as the block lasts; the folder in which all of it is."""
    missing = [name for name in ("munged", "slurmctld", "slurmd", "sbatch") if not which(name)]
    if missing:
        pytest.skip(f"no {', '.join(missing)}: apt-get install slurm-wlm munge")
    if os.getuid() != 0:
        pytest.skip("SLURM on one machine needs root")
    script = str(Path(__file__).with_name("slurm.sh"))
    # Not below pytest's own folder: the path of a socket may have about 100 characters.
    folder = tempfile.mkdtemp(prefix="slurm")
    with pytest.MonkeyPatch.context() as environment:
        environment.setenv("SLURM_CONF", f"{folder}/slurm.conf")
        environment.setenv("PATH", f"{os.environ['PATH']}:/usr/sbin")
        try:
            subprocess.run([script, "up", folder], check=True, timeout=60)
            yield Path(folder)
        finally:
            subprocess.run([script, "down", folder], check=True, timeout=60)
            shutil.rmtree(folder)


@pytest.fixture(scope="session")
def slurm() -> Iterator[dict[str, Any]]:
    """A SLURM that takes jobs; what its plugin is given."""
    with slurm_cluster():
        yield {}


@contextmanager
def ipython_cluster(engines: int) -> Iterator[tuple[Any, dict[str, Any]]]:
    """Engines of IPython, for as long as the block lasts, and what the plugin is given."""
    ipyparallel = pytest.importorskip("ipyparallel", reason="no ipyparallel")
    with tempfile.TemporaryDirectory(prefix="ipython", ignore_cleanup_errors=True) as folder:
        cluster = ipyparallel.Cluster(n=engines, profile_dir=folder, log_level=40)
        cluster.start_cluster_sync()
        try:
            (file,) = Path(folder, "security").glob("*-client.json")
            with ipyparallel.Client(str(file)) as client:
                client.wait_for_engines(engines, timeout=60)
            yield cluster, {"url_file": str(file)}
        finally:
            cluster.stop_cluster_sync()


@pytest.fixture(scope="session")
def cluster() -> Iterator[tuple[Any, dict[str, Any]]]:
    """An IPython cluster with two engines, and what its plugin is given."""
    with ipython_cluster(engines=2) as made:
        yield made


@pytest.fixture
def ipython(cluster: tuple[Any, dict[str, Any]]) -> dict[str, Any]:
    """What the plugin of an IPython cluster with two engines is given."""
    return cluster[1]


@pytest.fixture
def mortal(cluster: tuple[Any, dict[str, Any]]) -> Iterator[dict[str, Any]]:
    """The same, for a test in which one of the engines dies: another comes in its place."""
    yield cluster[1]
    cluster[0].start_engines_sync(1)


def which(name: str) -> str | None:
    """A command, also one that is for root alone."""
    return shutil.which(name, path=f"{os.environ['PATH']}:/usr/sbin")
