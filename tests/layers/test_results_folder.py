"""The results folder is absent, whole and old, or whole and new: at any moment."""

from __future__ import annotations

import os
import signal
import subprocess
import sys
import time

import pytest

from geoclust.errors import OutputError
from geoclust.layers import results_folder as module
from geoclust.layers.results_folder import RESULT_FILES, results_file, results_folder

# Writes a folder of which every file holds the same word, and stops itself or waits at a chosen stage.
CHILD = """
import os, signal, sys, time
from pathlib import Path
from geoclust.layers import results_folder as module

out, word, stage, number = sys.argv[1], sys.argv[2], sys.argv[3], int(sys.argv[4])

def stop():
    os.kill(os.getpid(), number)
    time.sleep(5)  # an interrupt arrives here

def around(name, before, after):
    inner = getattr(module, name)
    def wrapped(*arguments):
        if before:
            stop()
        result = inner(*arguments)
        if after:
            stop()
        return result
    setattr(module, name, wrapped)

if stage == "flush":
    around("_flush", True, False)
elif stage == "before-rename":
    around("_put_in_place", True, False)
elif stage == "after-exchange":
    around("_exchange", False, True)
elif stage == "after-rename":
    around("_put_in_place", False, True)
elif stage == "between-renames":
    module._exchange = lambda one, other: False
    rename = Path.rename
    def first_then_stop(self, other):
        rename(self, other)
        if ".replaced-" in str(other):
            stop()
    Path.rename = first_then_stop

with module.results_folder(out, overwrite=True) as folder:
    for place, name in enumerate(module.RESULT_FILES):
        (folder / name).write_text(word)
        if stage == "body" and place == 2:
            stop()
        if stage == "slow":
            print(place, flush=True)
            time.sleep(0.01)
print("done", flush=True)
"""


def start(out, word, stage="none", number=signal.SIGKILL):
    arguments = [sys.executable, "-c", CHILD, str(out), word, stage, str(int(number))]
    return subprocess.Popen(arguments, stdout=subprocess.PIPE, stderr=subprocess.PIPE, text=True)


def fill(folder, word="old"):
    for name in RESULT_FILES:
        (folder / name).write_text(word)


def state(out):
    """What `out` is: None, or the one word that all of its files hold; fails on anything half-done."""
    if not out.exists():
        return None
    assert sorted(os.listdir(out)) == sorted(RESULT_FILES)
    words = {(out / name).read_text() for name in RESULT_FILES}
    assert len(words) == 1
    return words.pop()


def test_new_folder_appears_whole_at_the_end(tmp_path):
    out = tmp_path / "results"
    with results_folder(out) as folder:
        assert folder.parent == tmp_path
        assert folder.name.startswith(f".results.partial-{os.getpid()}-")
        fill(folder, "new")
        assert not out.exists()
    assert state(out) == "new"
    assert os.listdir(tmp_path) == ["results"]
    assert out.stat().st_mode & 0o777 == 0o777 & ~_umask()


def _umask():
    mask = os.umask(0)
    os.umask(mask)
    return mask


def test_empty_folder_is_taken(tmp_path):
    (tmp_path / "results").mkdir()
    with results_folder(tmp_path / "results") as folder:
        fill(folder, "new")
    assert state(tmp_path / "results") == "new"


@pytest.mark.parametrize("trouble", [ValueError, KeyboardInterrupt, SystemExit, GeneratorExit])
@pytest.mark.parametrize("earlier", [False, True])
def test_any_exception_leaves_everything_as_it_was(tmp_path, trouble, earlier):
    out = tmp_path / "results"
    if earlier:
        out.mkdir()
        fill(out)

    def fail_in_the_block():
        with results_folder(out, overwrite=True) as folder:
            fill(folder, "new")
            raise trouble

    with pytest.raises(trouble):
        fail_in_the_block()
    assert state(out) == ("old" if earlier else None)
    assert os.listdir(tmp_path) == (["results"] if earlier else [])


def test_results_are_not_replaced_unasked(tmp_path):
    out = tmp_path / "results"
    out.mkdir()
    fill(out)
    with pytest.raises(OutputError, match="choose another folder, or pass overwrite"), results_folder(out):
        pytest.fail("the block must not run")
    assert state(out) == "old"
    assert os.listdir(tmp_path) == ["results"]


@pytest.mark.parametrize("in_one_step", [True, False])
def test_overwrite_replaces_results_and_gis_companions(tmp_path, monkeypatch, in_one_step):
    if not in_one_step:
        monkeypatch.setattr(module, "_exchange", lambda one, other: False)
    out = tmp_path / "results"
    out.mkdir()
    fill(out)
    for name in ("results.gpkg-wal", "results.gpkg-shm", "centre_intensity.tif.aux.xml", "points.sld"):
        (out / name).write_text("old")
    with results_folder(out, overwrite=True) as folder:
        fill(folder, "new")
    assert state(out) == "new"
    assert os.listdir(tmp_path) == ["results"]


def test_old_results_come_back_if_the_second_rename_fails(tmp_path, monkeypatch):
    out = tmp_path / "results"
    out.mkdir()
    fill(out)
    monkeypatch.setattr(module, "_exchange", lambda one, other: False)
    rename = type(out).rename

    def fails_for_new_results(self, other):
        if ".partial-" in self.name:
            raise OSError(5, "Input/output error")
        return rename(self, other)

    monkeypatch.setattr(type(out), "rename", fails_for_new_results)
    with (
        pytest.raises(OutputError, match="cannot be put in place"),
        results_folder(out, overwrite=True) as folder,
    ):
        fill(folder, "new")
    assert state(out) == "old"
    assert os.listdir(tmp_path) == ["results"]


@pytest.mark.parametrize(
    "strange", ["thesis.odt", "my.sld", "survey.gpkg", "survey.gpkg-wal", "photos/", "fit.json/"]
)
def test_other_peoples_files_are_never_deleted(tmp_path, strange):
    out = tmp_path / "results"
    out.mkdir()
    fill(out)
    if strange == "fit.json/":
        (out / "fit.json").unlink()
    (out / strange).mkdir() if strange.endswith("/") else (out / strange).write_text("mine")
    with pytest.raises(OutputError, match="not geoclust's"), results_folder(out, overwrite=True):
        pytest.fail("the block must not run")
    assert (out / strange).exists()


def test_file_that_turns_up_meanwhile_is_kept(tmp_path):
    out = tmp_path / "results"

    def write():
        with results_folder(out) as folder:
            fill(folder, "new")
            out.mkdir()
            (out / "notes.txt").write_text("mine")

    with pytest.raises(OutputError, match="holds files already"):
        write()
    assert os.listdir(out) == ["notes.txt"]
    assert os.listdir(tmp_path) == ["results"]


def test_a_page_alone_is_not_taken_for_results(tmp_path):
    (tmp_path / "report.html").write_text("mine")
    with (
        pytest.raises(OutputError, match="does not look like"),
        results_folder(tmp_path, overwrite=True),
    ):
        pytest.fail("the block must not run")
    assert (tmp_path / "report.html").exists()


def test_caller_can_name_further_files(tmp_path):
    out = tmp_path / "results"
    for word in ("old", "new"):
        with results_folder(out, overwrite=True, known_files=["unsurveyed.tif"]) as folder:
            (folder / "unsurveyed.tif").write_text(word)
    assert (out / "unsurveyed.tif").read_text() == "new"


def test_impossible_places_are_said(tmp_path, monkeypatch):
    (tmp_path / "file").write_text("mine")
    monkeypatch.chdir(tmp_path)
    for out, words in [
        (tmp_path / "no" / "results", "There is no folder"),
        (tmp_path / "file" / "results", "There is no folder"),
        (tmp_path / "file", "is a file, not a folder"),
        (".", "the folder you are working in"),
        ("..", "the folder you are working in"),
        ("/", "the folder you are working in"),
        ("a\0b", "no usable name"),
        ("x" * 250, "No folder can be made"),
    ]:
        with pytest.raises(OutputError, match=words), results_folder(out, overwrite=True):
            pytest.fail("the block must not run")
    assert os.listdir(tmp_path) == ["file"]
    # root may write anywhere, so the answer of the system is put in its mouth
    monkeypatch.setattr(os, "access", lambda path, mode: False)
    with pytest.raises(OutputError, match="cannot be written to"), results_folder(tmp_path / "results"):
        pytest.fail("the block must not run")


def test_full_disk_is_said(tmp_path):
    def write():
        with results_folder(tmp_path / "results") as folder:
            fill(folder)
            raise OSError(28, "No space left on device")

    with pytest.raises(OutputError, match="No space left"):
        write()
    assert os.listdir(tmp_path) == []


def test_link_to_a_folder_stays_a_link(tmp_path):
    (tmp_path / "real").mkdir()
    (tmp_path / "link").symlink_to("real")
    with results_folder(tmp_path / "link") as folder:
        fill(folder, "new")
    assert (tmp_path / "link").is_symlink()
    assert state(tmp_path / "real") == "new"


def test_only_leftovers_of_dead_runs_for_the_same_folder_are_removed(tmp_path):
    child = start(tmp_path / "elsewhere", "x", "body")
    child.wait(timeout=30)
    child.communicate()
    (leftover,) = os.listdir(tmp_path)
    assert leftover.startswith(f".elsewhere.partial-{child.pid}-")
    dead = leftover.removeprefix(".elsewhere.partial-")
    other_machine = f"{child.pid}-{'0000' if module._machine() != '0000' else '1111'}01234567"
    living = f"{os.getppid()}-{module._machine()}01234567"
    names = [f".results.partial-{dead}", f".results.partial-{other_machine}", f".results.partial-{living}"]
    for name in [*names, f".results2.partial-{dead}", ".results.partial-notes"]:
        (tmp_path / name).mkdir()
    with results_folder(tmp_path / "results") as folder:
        fill(folder)
    left = {leftover, *names[1:], f".results2.partial-{dead}", ".results.partial-notes", "results"}
    assert set(os.listdir(tmp_path)) == left


STAGES = {
    # stage: does a kill there leave the old results (or none) or the new ones?
    "body": "old",
    "flush": "old",
    "before-rename": "old",
    "after-exchange": "new",
    "after-rename": "new",
}


@pytest.mark.parametrize("number", [signal.SIGINT, signal.SIGKILL])
@pytest.mark.parametrize(
    ("stage", "earlier"),
    # names are exchanged only where there are earlier results
    [
        (stage, earlier)
        for stage in STAGES
        for earlier in (False, True)
        if earlier or stage != "after-exchange"
    ],
)
def test_interrupted_at_every_stage(tmp_path, number, stage, earlier):
    out = tmp_path / "results"
    if earlier:
        out.mkdir()
        fill(out)
    child = start(out, "new", stage, number)
    printed, _ = child.communicate(timeout=30)
    assert "done" not in printed
    assert child.returncode != 0
    assert state(out) == ("new" if STAGES[stage] == "new" else "old" if earlier else None)
    if number == signal.SIGINT:
        assert os.listdir(tmp_path) == (["results"] if out.exists() else [])
    # the next run finds its way and leaves nothing behind
    with results_folder(out, overwrite=True) as folder:
        fill(folder, "third")
    assert state(out) == "third"
    assert os.listdir(tmp_path) == ["results"]


@pytest.mark.parametrize("number", [signal.SIGINT, signal.SIGKILL])
def test_interrupted_between_two_renames(tmp_path, number):
    out = tmp_path / "results"
    out.mkdir()
    fill(out)
    start(out, "new", "between-renames", number).communicate(timeout=30)
    if number == signal.SIGINT:
        assert state(out) == "old"
        assert os.listdir(tmp_path) == ["results"]
        return
    # where names cannot be exchanged in one step, the old results are set aside, whole, for an instant
    assert state(out) is None
    with pytest.raises(OutputError, match="holds files already"), results_folder(out):
        pytest.fail("the block must not run")
    assert state(out) == "old"
    assert os.listdir(tmp_path) == ["results"]


def test_killed_at_arbitrary_moments(tmp_path):
    out = tmp_path / "results"
    seen = set()
    for attempt in range(8):
        word = f"run{attempt}"
        before = state(out)
        child = start(out, word, "slow")
        child.stdout.readline()  # it has begun to write
        time.sleep(0.008 * attempt)
        child.send_signal(signal.SIGKILL if attempt % 2 else signal.SIGINT)
        child.communicate(timeout=30)
        assert state(out) in (before, word)
        seen.add(state(out) == word)
    with results_folder(out, overwrite=True) as folder:
        fill(folder, "last")
    assert state(out) == "last"
    assert os.listdir(tmp_path) == ["results"]
    assert False in seen


def test_single_file_appears_whole_at_the_end(tmp_path):
    with results_file(tmp_path / "a.gpkg") as path:
        path.write_text("new")
        assert path.name == "a.gpkg"
        assert not (tmp_path / "a.gpkg").exists()
    assert (tmp_path / "a.gpkg").read_text() == "new"
    assert os.listdir(tmp_path) == ["a.gpkg"]

    def fail_in_the_block():
        with results_file(tmp_path / "a.gpkg", overwrite=True) as path:
            path.write_text("newer")
            raise KeyboardInterrupt

    with pytest.raises(KeyboardInterrupt):
        fail_in_the_block()
    assert (tmp_path / "a.gpkg").read_text() == "new"
    assert os.listdir(tmp_path) == ["a.gpkg"]


def test_single_file_is_not_replaced_unasked_nor_while_in_use(tmp_path):
    (tmp_path / "a.gpkg").write_text("old")
    (tmp_path / "b").mkdir()
    (tmp_path / "c.gpkg-wal").write_text("log")
    for name, overwrite, words in [
        ("a.gpkg", False, "exists already"),
        ("b", True, "is a folder"),
        ("c.gpkg", True, "in use by another program"),
        ("no/a.gpkg", True, "There is no folder"),
    ]:
        with pytest.raises(OutputError, match=words), results_file(tmp_path / name, overwrite):
            pytest.fail("the block must not run")
    with results_file(tmp_path / "a.gpkg", overwrite=True) as path:
        path.write_text("new")
    assert (tmp_path / "a.gpkg").read_text() == "new"
