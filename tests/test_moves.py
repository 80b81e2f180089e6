from __future__ import annotations

import errno
import os
import signal
import subprocess
import sys
import time
from pathlib import Path

import pytest
from disks import make_read_only, small_disk, somebody_else
from record_samples import records

from sercheck import outputs
from sercheck.errors import OutputError
from sercheck.outputs import move_batch, whole_file


@pytest.fixture(params=["same disk", "other disk"])
def inbox_and_folder(request, tmp_path):
    """An inbox and a folder to move to, on one filesystem and on two."""
    inbox = tmp_path / "inbox"
    inbox.mkdir()
    if request.param == "same disk":
        yield inbox, tmp_path / "released"
    else:
        with small_disk(tmp_path / "other") as disk:
            yield inbox, disk / "released"


def names(folder: Path) -> list[str]:
    """What is in a folder, hidden files too."""
    return sorted(path.name for path in folder.iterdir())


def test_files_move_and_keep_their_content(inbox_and_folder):
    """All files of the batch are in the folder afterwards, and nothing else is anywhere."""
    inbox, folder = inbox_and_folder
    for name in ("a.csv", "b.csv"):
        (inbox / name).write_text(name)
    os.utime(inbox / "a.csv", (1, 2))
    assert move_batch([inbox / "a.csv", inbox / "b.csv"], folder) == (folder / "a.csv", folder / "b.csv")
    assert names(inbox) == []
    assert names(folder) == ["a.csv", "b.csv"]
    assert (folder / "a.csv").read_text() == "a.csv"
    assert (folder / "a.csv").stat().st_mtime == 2


def test_a_repeat_ends_as_the_first_run(inbox_and_folder):
    """A file that was moved before, or is there with the same content, counts as moved."""
    inbox, folder = inbox_and_folder
    (inbox / "a.csv").write_text("rows")
    assert move_batch([inbox / "a.csv"], folder) == move_batch([inbox / "a.csv"], folder)
    (inbox / "a.csv").write_text("rows")
    assert move_batch([inbox / "a.csv"], folder) == (folder / "a.csv",)
    assert names(inbox) == []
    assert names(folder) == ["a.csv"]


def test_nothing_is_overwritten(inbox_and_folder):
    """Another batch under a name that is taken gets the next number, and a repeat of it the same one."""
    inbox, folder = inbox_and_folder
    for text in ("monday", "tuesday", "wednes", "tuesday"):
        (inbox / "latest.csv.gz").write_text(text)
        moved = move_batch([inbox / "latest.csv.gz"], folder)
    assert moved == (folder / "latest.2.csv.gz",)
    assert names(folder) == ["latest.2.csv.gz", "latest.3.csv.gz", "latest.csv.gz"]
    assert (folder / "latest.csv.gz").read_text() == "monday"
    assert names(inbox) == []


def test_a_file_that_is_nowhere_is_an_output_error(tmp_path):
    """A batch file that is neither at the old nor at the new place is told."""
    with pytest.raises(OutputError, match="in neither place"):
        move_batch([tmp_path / "gone.csv"], tmp_path / "released")


def test_moving_into_its_own_folder_changes_nothing(tmp_path):
    """A file that is already in the folder stays, under any spelling of the folder."""
    (tmp_path / "a.csv").write_text("rows")
    (tmp_path / "alias").symlink_to(tmp_path)
    assert move_batch([tmp_path / "a.csv"], tmp_path / "alias") == (tmp_path / "a.csv",)
    assert (tmp_path / "a.csv").read_text() == "rows"


def test_a_link_is_replaced_by_what_it_leads_to(tmp_path):
    """The folder gets the content, the link goes, the file it led to stays."""
    (tmp_path / "real.csv").write_text("rows")
    (tmp_path / "link.csv").symlink_to("real.csv")
    move_batch([tmp_path / "link.csv"], tmp_path / "released")
    assert (tmp_path / "released" / "link.csv").read_text() == "rows"
    assert not (tmp_path / "released" / "link.csv").is_symlink()
    assert names(tmp_path) == ["real.csv", "released"]


def test_a_kill_between_the_two_names_is_mended_by_a_repeat(tmp_path):
    """With both names there, as a kill between them leaves it, a repeat takes the old one away."""
    (tmp_path / "a.csv").write_text("rows")
    (tmp_path / "released").mkdir()
    os.link(tmp_path / "a.csv", tmp_path / "released" / "a.csv")
    assert move_batch([tmp_path / "a.csv"], tmp_path / "released") == (tmp_path / "released" / "a.csv",)
    assert names(tmp_path) == ["released"]


def test_a_filesystem_without_links_is_served_too(tmp_path, monkeypatch):
    """Where hard links are refused a file is renamed, and still nothing is overwritten."""

    def refuse(*_: object) -> None:
        raise OSError(errno.EPERM, "no links here")

    monkeypatch.setattr(outputs.os, "link", refuse)
    for text in ("one", "two"):
        (tmp_path / "a.csv").write_text(text)
        move_batch([tmp_path / "a.csv"], tmp_path / "released")
    assert names(tmp_path / "released") == ["a.2.csv", "a.csv"]
    assert (tmp_path / "released" / "a.csv").read_text() == "one"


def test_folders_that_cannot_be_used_are_told(tmp_path):
    """A missing parent, a file in place of the folder and a folder in place of a file are output errors."""
    (tmp_path / "a.csv").write_text("rows")
    (tmp_path / "d").mkdir()
    with pytest.raises(OutputError, match="no folder"):
        move_batch([tmp_path / "a.csv"], tmp_path / "no" / "released")
    with pytest.raises(OutputError, match="a file stands where a folder"):
        move_batch([tmp_path / "a.csv"], tmp_path / "a.csv")
    with pytest.raises(OutputError, match="not a file"):
        move_batch([tmp_path / "d"], tmp_path / "released")
    assert (tmp_path / "a.csv").read_text() == "rows"


def test_a_full_disk_loses_nothing(tmp_path):
    """When the other disk is full the file stays where it was and no part of it is over there."""
    (tmp_path / "a.csv").write_bytes(b"x" * 2_000_000)
    with small_disk(tmp_path / "other") as disk:
        with pytest.raises(OutputError, match="disk is full"):
            move_batch([tmp_path / "a.csv"], disk)
        assert names(disk) == []
    assert (tmp_path / "a.csv").stat().st_size == 2_000_000


def test_a_kill_while_copying_leaves_the_whole_file_or_none(tmp_path):
    """Killed at random moments of a copy to another disk, the new name holds everything or does not exist."""
    content = os.urandom(1 << 20) * 24
    code = "from sercheck.outputs import move_batch; print(1, flush=True); move_batch(['a.csv'], {!r})"
    with small_disk(tmp_path / "other", "300m") as disk:
        seen = set()
        for wait in (0.0, 0.002, 0.005, 0.01, 0.02, 0.5):
            (tmp_path / "a.csv").write_bytes(content)
            command = [sys.executable, "-c", code.format(str(disk))]
            process = subprocess.Popen(command, cwd=tmp_path, stdout=subprocess.PIPE)
            process.stdout.readline()
            time.sleep(wait)
            process.send_signal(signal.SIGKILL)
            process.wait()
            process.stdout.close()
            arrived = (disk / "a.csv").exists()
            seen.add(arrived)
            assert not arrived or (disk / "a.csv").read_bytes() == content
            assert arrived or (tmp_path / "a.csv").read_bytes() == content
            move_batch([tmp_path / "a.csv"], disk)
            assert (disk / "a.csv").read_bytes() == content
            assert not (tmp_path / "a.csv").exists()
            for path in disk.iterdir():
                path.unlink()
        assert True in seen


def test_a_file_is_written_whole_or_not_at_all(tmp_path):
    """When writing fails the older file is untouched and no part of the new one is left."""
    (tmp_path / "r.jsonl").write_text("old")
    with pytest.raises(TypeError), whole_file(tmp_path / "r.jsonl") as file:
        file.writelines([b"new", None])
    assert (tmp_path / "r.jsonl").read_text() == "old"
    assert names(tmp_path) == ["r.jsonl"]


def test_a_written_file_keeps_rights_and_links(tmp_path):
    """An older file's permissions stay, a link to it stays a link, a new file gets those of any new file."""
    (tmp_path / "real.csv").write_text("old")
    (tmp_path / "real.csv").chmod(0o640)
    (tmp_path / "link.csv").symlink_to("real.csv")
    records(2).write(tmp_path / "link.csv")
    assert (tmp_path / "link.csv").is_symlink()
    assert (tmp_path / "real.csv").read_text() != "old"
    assert (tmp_path / "real.csv").stat().st_mode & 0o777 == 0o640
    old = os.umask(0o027)
    records(2).write(tmp_path / "new.csv")
    os.umask(old)
    assert (tmp_path / "new.csv").stat().st_mode & 0o777 == 0o640


def test_only_ordinary_files_are_replaced(tmp_path):
    """A folder or a pipe under the name is refused and stays."""
    (tmp_path / "d.csv").mkdir()
    os.mkfifo(tmp_path / "p.csv")
    with pytest.raises(OutputError, match="is a folder"):
        records(2).write(tmp_path / "d.csv")
    with pytest.raises(OutputError, match="a device or a pipe"):
        records(2).write(tmp_path / "p.csv")
    assert names(tmp_path) == ["d.csv", "p.csv"]


@pytest.mark.parametrize("suffix", ["jsonl", "csv", "parquet"])
def test_a_full_or_read_only_disk_leaves_no_half_of_the_records(tmp_path, suffix):
    """A full disk and a read-only one are output errors that leave the older file as it was."""
    found = records(20_000)
    with small_disk(tmp_path / "disk") as disk:
        (disk / f"r.{suffix}").write_text("old")
        with pytest.raises(OutputError, match="disk is full"):
            found.write(disk / f"r.{suffix}")
        assert names(disk) == [f"r.{suffix}"]
        make_read_only(disk)
        with pytest.raises(OutputError, match=r"read-only|no permission"):
            found.write(disk / f"r.{suffix}")
        assert (disk / f"r.{suffix}").read_text() == "old"


def test_no_permission_is_told(tmp_path, monkeypatch):
    """A folder of somebody else is refused in one sentence."""
    (tmp_path / "private").mkdir(mode=0o700)
    monkeypatch.chdir(tmp_path)
    with somebody_else(), pytest.raises(OutputError, match="no permission"):
        records(2).write("private/r.csv")


def test_what_a_killed_process_left_behind_is_cleared_away(tmp_path):
    """A draft of a process that is no more goes with the next file written there; that of a living one stays."""
    code = (
        "import os, signal; from sercheck.outputs import whole_file\n"
        "with whole_file('out.csv') as file:\n"
        "    file.write(b'half'); file.flush(); os.kill(os.getpid(), signal.SIGKILL)\n"
    )
    subprocess.run([sys.executable, "-c", code], cwd=tmp_path, check=False)
    (left,) = tmp_path.glob(".sercheck-*.tmp")
    alive = left.with_name(left.name.replace(left.name.split("-")[2], str(os.getpid())))
    alive.write_bytes(b"going on")
    with whole_file(tmp_path / "other.csv") as file:
        file.write(b"whole")
    assert sorted(path.name for path in tmp_path.iterdir()) == sorted([alive.name, "other.csv"])
