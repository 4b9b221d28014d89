"""A folder appears whole or not at all, whatever happens while it is written."""

from __future__ import annotations

import errno
import fcntl
import os
import signal
import subprocess
import sys
import textwrap
from pathlib import Path

import pytest

from netlist import folder as module
from netlist.folder import check_destination, write_folder
from synth.errors import JobError

OLD = {"mark": b"ours", "a": b"old a", "b": b"old b"}
NEW = {"mark": b"ours", "a": b"new a", "b": b"new b"}


def is_ours(path: Path) -> bool:
    return (path / "mark").exists()


def content(path: Path) -> dict[str, bytes]:
    return {p.name: p.read_bytes() for p in path.iterdir()}


def hidden(parent: Path) -> list[str]:
    return [p.name for p in parent.iterdir() if p.name.startswith(".polewright-")]


def test_a_new_folder_holds_exactly_the_files_and_parents_are_made(tmp_path):
    write_folder(tmp_path / "a" / "b", NEW, is_ours=is_ours)
    assert content(tmp_path / "a" / "b") == NEW
    assert hidden(tmp_path / "a") == []


def test_an_earlier_result_is_replaced_and_other_files_in_it_stay(tmp_path):
    place = tmp_path / "x"
    write_folder(place, OLD, is_ours=is_ours)
    (place / "notes.txt").write_text("mine")
    (place / "deep").mkdir()
    (place / "deep" / "more.txt").write_text("mine too")
    place.chmod(0o750)
    write_folder(place, NEW, is_ours=is_ours)
    assert (place / "notes.txt").read_text() == "mine"
    assert (place / "deep" / "more.txt").read_text() == "mine too"
    assert {name: (place / name).read_bytes() for name in NEW} == NEW
    assert place.stat().st_mode & 0o777 == 0o750
    assert hidden(tmp_path) == []


def test_an_empty_folder_and_a_link_to_one_are_accepted(tmp_path):
    (tmp_path / "real").mkdir()
    (tmp_path / "link").symlink_to(tmp_path / "real")
    write_folder(tmp_path / "link", NEW, is_ours=is_ours)
    assert (tmp_path / "link").is_symlink()
    assert content(tmp_path / "real") == NEW


@pytest.mark.parametrize("exchange", [True, False])
def test_without_an_exchange_of_names_two_renames_do(tmp_path, monkeypatch, exchange):
    if not exchange:
        monkeypatch.setattr(module, "_exchange", lambda one, other: False)
    write_folder(tmp_path / "x", OLD, is_ours=is_ours)
    write_folder(tmp_path / "x", NEW, is_ours=is_ours)
    assert content(tmp_path / "x") == NEW
    assert hidden(tmp_path) == []


@pytest.mark.parametrize("step", ["_write_file", "_swap", "_sync"])
def test_a_full_disk_changes_nothing_and_is_one_line(tmp_path, monkeypatch, step):
    write_folder(tmp_path / "x", OLD, is_ours=is_ours)

    def fail(*_):
        raise OSError(errno.ENOSPC, os.strerror(errno.ENOSPC))

    monkeypatch.setattr(module, step, fail)
    with pytest.raises(JobError, match=r"^cannot write to .*x: no space left on device$"):
        write_folder(tmp_path / "x", NEW, is_ours=is_ours)
    assert content(tmp_path / "x") == OLD
    assert hidden(tmp_path) == []


def test_an_interruption_changes_nothing(tmp_path, monkeypatch):
    write_folder(tmp_path / "x", OLD, is_ours=is_ours)

    def interrupt(*_, **__):
        raise KeyboardInterrupt

    monkeypatch.setattr(module, "_carry_over", interrupt)
    with pytest.raises(KeyboardInterrupt):
        write_folder(tmp_path / "x", NEW, is_ours=is_ours)
    assert content(tmp_path / "x") == OLD
    assert hidden(tmp_path) == []


def test_a_folder_of_someone_else_is_refused_untouched(tmp_path):
    (tmp_path / "x").mkdir()
    (tmp_path / "x" / "thesis.tex").write_text("years of work")
    with pytest.raises(JobError, match="holds files but no earlier result"):
        write_folder(tmp_path / "x", NEW, is_ours=is_ours)
    assert [p.name for p in (tmp_path / "x").iterdir()] == ["thesis.tex"]


def test_a_file_in_the_way_is_named(tmp_path):
    (tmp_path / "x").write_text("a file")
    with pytest.raises(JobError, match="it is a file, expected a folder"):
        check_destination(tmp_path / "x", is_ours=is_ours)
    with pytest.raises(JobError, match="cannot write to"):
        check_destination(tmp_path / "x" / "y", is_ours=is_ours)


def test_no_permission_is_one_line(tmp_path, monkeypatch):
    monkeypatch.setattr(os, "access", lambda *_: False)
    with pytest.raises(JobError, match="no permission to create it in"):
        check_destination(tmp_path / "x", is_ours=is_ours)


@pytest.mark.parametrize("name", ["n" * 300, "nul\0byte"])
def test_a_name_the_system_refuses_is_one_line(tmp_path, name):
    with pytest.raises(JobError, match="cannot write to") as caught:
        write_folder(tmp_path / name, NEW, is_ours=is_ours)
    assert "\n" not in str(caught.value)
    assert hidden(tmp_path) == []


def test_what_a_living_process_is_writing_is_left_alone(tmp_path):
    write_folder(tmp_path / "x", OLD, is_ours=is_ours)
    busy = tmp_path / f"{module._prefix(tmp_path / 'x')}busy"
    dead = tmp_path / f"{module._prefix(tmp_path / 'x')}dead"
    busy.mkdir()
    dead.mkdir()
    lock = os.open(busy, os.O_RDONLY)
    fcntl.flock(lock, fcntl.LOCK_EX)
    try:
        write_folder(tmp_path / "x", NEW, is_ours=is_ours)
        assert busy.exists()
        assert not dead.exists()
    finally:
        os.close(lock)


KILLED = """
import os, shutil, signal, sys
from pathlib import Path
from netlist import folder
place, steps, exchange = Path(sys.argv[1]), int(sys.argv[2]), sys.argv[3] == "exchange"
left = [steps]
def counted(call):
    def step(*args, **kwargs):
        left[0] -= 1
        if left[0] == 0:
            os.kill(os.getpid(), signal.SIGKILL)
        return call(*args, **kwargs)
    return step
os.fsync, shutil.rmtree = counted(os.fsync), counted(shutil.rmtree)
Path.rename = counted(Path.rename)
folder._exchange = counted(folder._exchange) if exchange else (lambda one, other: False)
folder.write_folder(place, {"mark": b"ours", "a": b"new a", "b": b"new b"}, is_ours=lambda p: True)
"""


@pytest.mark.parametrize("way", ["exchange", "renames"])
def test_killed_at_any_moment_leaves_the_old_or_the_new_and_the_next_run_cleans(tmp_path, way):
    place = tmp_path / "x"
    seen = []
    for steps in range(1, 20):
        write_folder(place, OLD, is_ours=is_ours)
        command = [sys.executable, "-c", textwrap.dedent(KILLED), str(place), str(steps), way]
        ended = subprocess.run(command, check=False).returncode
        if ended == 0:
            break
        assert ended == -signal.SIGKILL
        if way == "exchange":  # nobody ever finds the place empty
            assert content(place) in (OLD, NEW)
        seen.append("new" if place.exists() and content(place) == NEW else "old")
        module._sweep(place)
        assert content(place) in (OLD, NEW)
        assert hidden(tmp_path) == []
    else:
        pytest.fail("the run never came to its end")
    assert seen[0] == "old"
    assert seen[-1] == "new"
