"""The ledger: what two writers, a kill, a merge and a changed byte do to it."""

import hashlib
import itertools
import json
import os
import random
import shutil
import signal
import subprocess
import sys
import tempfile
import time
from pathlib import Path

import pytest
from click.testing import CliRunner
from sequester.nodes.errors import InputError
from sequester.workflows.cli import main
from sequester.workflows.ledger import Chain, Ledger

WRITER = """
import sys
from pathlib import Path
from sequester.workflows.ledger import Ledger
ledger = Ledger(Path(sys.argv[1]))
for i in range(int(sys.argv[3])):
    ledger.append([{"kind": "look", "by": sys.argv[2], "n": i}])
"""


def note(*words):
    return [{"kind": "waiver", "says": word} for word in words]


def writer(path, name, n):
    return subprocess.Popen([sys.executable, "-c", WRITER, str(path), name, str(n)])


@pytest.fixture
def quick(tmp_path):
    """A ledger in memory, where there is such a folder: a disk takes 10 ms for every entry."""
    memory = Path("/dev/shm")
    with tempfile.TemporaryDirectory(dir=memory if memory.is_dir() else tmp_path) as folder:
        yield Path(folder) / "STUDY.ledger.jsonl"


@pytest.fixture
def small(tmp_path):
    ledger = Ledger(tmp_path / "STUDY.ledger.jsonl")
    ledger.append(note("first"))
    ledger.append(note("second", "third"))
    ledger.append(note("föurth"))
    return ledger


def test_two_processes_that_append_a_thousand_entries_each_lose_none(quick):
    path = quick
    both = [writer(path, name, 1000) for name in ("one", "other")]
    assert [process.wait(timeout=300) for process in both] == [0, 0]
    chain = Ledger(path).sound()
    assert len(chain.entries) == 2000 and len(chain.heads) == 1 and chain.torn == 0
    for name in ("one", "other"):  # each writer's own entries are in its own order
        mine = [entry.body["n"] for entry in chain.entries if entry.body["by"] == name]
        assert mine == list(range(1000))
    writers = [entry.body["by"] for entry in chain.entries]
    assert sum(a != b for a, b in itertools.pairwise(writers)) > 1  # they took turns


def test_a_writer_that_is_killed_at_any_moment_leaves_a_ledger_that_goes_on(quick):
    """50 kills in the midst of writing: no fault, and whoever comes next appends."""
    path, ledger = quick, Ledger(quick)
    ledger.append(note("start"))
    rng, grown = random.Random(3), 0
    # One process after another would spend all its time on starting Python: children fork.
    for i in range(50):
        child = os.fork()
        if not child:
            own = Ledger(path)
            while True:
                own.append([{"kind": "look", "padding": "x" * 5000}] * 20)
        time.sleep(rng.uniform(0.002, 0.03))
        os.kill(child, signal.SIGKILL)
        os.waitpid(child, 0)
        chain = Chain(path.read_bytes())
        assert chain.problems() == []
        before = len(chain.entries)
        grown += before > i + 1
        (entry,) = ledger.append(note(f"after kill {i}"))
        chain = Ledger(path).sound()
        assert chain.entries[-1].digest == entry.digest
        assert (len(chain.entries), chain.torn) == (before + 1, 0)
    assert grown > 25  # the children were killed while they wrote, not before


def test_a_torn_tail_is_told_and_only_the_next_append_takes_it_away(small):
    whole = small.path.read_bytes()
    torn = whole + whole.splitlines(keepends=True)[-1][:-1]  # an entry, but for its line end
    small.path.write_bytes(torn)
    chain = small.chain()
    assert (chain.problems(), chain.torn, len(chain.entries)) == ([], len(torn) - len(whole), 4)
    result = CliRunner().invoke(main, ["verify", str(small.path)])
    assert result.exit_code == 0 and f"A torn tail of {chain.torn} bytes" in result.output
    assert small.path.read_bytes() == torn
    small.append(note("fifth"))
    assert small.path.read_bytes().startswith(whole + b'{"entry":"')
    assert small.sound().torn == 0


def test_every_changed_byte_is_found(small):
    """Any bit of any byte, up to the last line end: where a tail could be torn."""
    whole = small.path.read_bytes()
    for i in range(len(whole) - 1):
        for bit in range(8):
            changed = bytearray(whole)
            changed[i] ^= 1 << bit
            line = whole[:i].count(b"\n") + 1
            faults = Chain(bytes(changed)).faults
            assert faults and faults[0].startswith(f"line {line}:"), (i, bit)


def test_lines_that_were_removed_moved_or_put_in_are_found(small):
    one, two, three, four = small.path.read_bytes().splitlines(keepends=True)
    for lines in ([two, three, four], [one, three, four], [one, three, two, four]):
        assert "which is not above" in Chain(b"".join(lines)).faults[0]
    assert "the same entry as line" in Chain(one + two + two + three).faults[0]
    # One that is put in with a digest of its own ends a branch that nothing joins.
    body = json.loads(two)
    content = json.dumps({k: v for k, v in body.items() if k != "entry"} | {"says": "never"})[1:]
    digest = hashlib.sha256(content.encode()).hexdigest()
    forged = b'{"entry":"' + digest.encode() + b'",' + content.encode() + b"\n"
    chain = Chain(one + forged + two + three + four)
    assert chain.problems() == [] and "branches end at" in chain.unjoined


def test_a_changed_ledger_is_not_appended_to(small):
    whole = small.path.read_bytes()
    changed = whole.replace(b"second", b"secund")
    small.path.write_bytes(changed)
    with pytest.raises(InputError, match=r"the ledger was changed .* got line 2: its bytes"):
        Ledger(small.path).append(note("more"))
    assert small.path.read_bytes() == changed
    result = CliRunner().invoke(main, ["verify", str(small.path)])
    assert result.exit_code == 1 and "line 2: its bytes are not those" in result.output


def test_writing_all_of_it_again_is_found_by_whoever_noted_the_head(small):
    head = small.chain().heads[0]
    small.append(note("fifth"))
    again = Ledger(small.path.with_name("again.ledger.jsonl"))
    again.append(note("first", "second", "never said", "fourth", "fifth"))
    assert again.chain().problems() == []  # no chain can show it by itself
    asked = [(small, head, 0), (again, head, 1), (small, f" {head[:12].upper()}", 0)]
    asked += [(small, wrong, 2) for wrong in (head[:11], f"{head}0", "the first head")]
    for ledger, noted, code in asked:
        args = ["verify", str(ledger.path), "--deposited", noted]
        assert CliRunner().invoke(main, args).exit_code == code, noted


@pytest.mark.skipif(shutil.which("git") is None, reason="git is not installed")
def test_a_git_merge_of_two_branches_is_joined_by_the_next_entry(tmp_path):
    def git(*words):
        who = ["-c", "user.name=gardener", "-c", "user.email=gardener@example.org"]
        subprocess.run(["git", *who, *words], cwd=tmp_path, check=True, capture_output=True)

    path = tmp_path / "STUDY.ledger.jsonl"
    git("init", "-q", "-b", "main")
    (tmp_path / ".gitattributes").write_text("*.ledger.jsonl merge=union -text\n")
    Ledger(path).append(note("common"))
    git("add", ".gitattributes", path.name)
    git("commit", "-qm", "start")
    git("checkout", "-qb", "other")
    theirs = Ledger(path).append(note("theirs, 1", "theirs, 2"))
    git("commit", "-qam", "theirs")
    git("checkout", "-q", "main")
    ours = Ledger(path).append(note("ours"))
    git("commit", "-qam", "ours")
    git("merge", "-q", "other")
    chain = Ledger(path).sound()
    assert set(chain.heads) == {ours[-1].digest, theirs[-1].digest}
    assert chain.problems() == [] and "the next run or declare joins them" in chain.unjoined
    said = CliRunner().invoke(main, ["verify", str(path)])
    assert said.exit_code == 4 and "more than one end, as after a merge" in said.stderr
    said = CliRunner().invoke(main, ["verify", str(path), "--deposited", "0" * 64])
    assert said.exit_code == 1 and "was written again" in said.stderr
    shutil.copyfile(path, tmp_path / "copy.ledger.jsonl")
    assert Ledger(tmp_path / "copy.ledger.jsonl").append([]) == []  # nothing new joins them too
    assert CliRunner().invoke(main, ["verify", str(tmp_path / "copy.ledger.jsonl")]).exit_code == 0
    (new,) = Ledger(path).append(note("after"))
    chain = Ledger(path).sound()
    assert chain.problems() == [] and chain.heads == (new.digest,)
    (merge,) = chain.of_kind("merge")
    assert set(merge.parents) == {ours[-1].digest, theirs[-1].digest}
    # Neither branch comes before the other; both come before what joins them.
    mine, other = ours[-1], theirs[0]
    assert not chain.precedes(mine, other) and not chain.precedes(other, mine)
    assert chain.precedes(mine, new) and chain.precedes(other, new)


def test_one_writer_sees_what_another_wrote_or_put_in_place_of_it(small, tmp_path):
    other = Ledger(small.path)
    other.append(note("fifth"))
    small.append(note("sixth"))
    assert [entry.body["says"] for entry in small.sound().entries[-2:]] == ["fifth", "sixth"]
    older = b"".join(small.path.read_bytes().splitlines(keepends=True)[:2])
    small.path.write_bytes(older)  # what a checkout of an older commit does
    assert len(small.sound().entries) == 2
    small.path.unlink()
    assert small.sound().entries == []


def test_a_folder_that_takes_no_ledger_is_told(tmp_path, monkeypatch):
    monkeypatch.setattr(os, "access", lambda path, mode: False)
    with pytest.raises(InputError, match=r"the ledger cannot be written .*folder of your own"):
        Ledger(tmp_path / "STUDY.ledger.jsonl").check_writable()
    assert list(tmp_path.iterdir()) == []


def test_verify_says_when_there_is_none(tmp_path):
    result = CliRunner().invoke(main, ["verify", str(tmp_path / "STUDY.toml")])
    assert result.exit_code == 2 and "no such ledger" in result.output
