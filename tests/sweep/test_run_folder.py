"""Rules of the run folder, and files that appear whole or not at all."""

import os
import re

import pytest
from sweep import small

from roa.errors import MachineError, UserError
from roa.sweep.run_folder import RunFolder, write_atomically, written_aside


class TestNew:
    def test_nothing_is_written(self, tmp_path):
        RunFolder.new(tmp_path / "run", "mast.toml")
        assert list(tmp_path.iterdir()) == []

    def test_named_by_configuration_and_time(self, tmp_path, monkeypatch):
        monkeypatch.chdir(tmp_path)
        folder = RunFolder.new(None, "configs/mast.toml")
        assert re.fullmatch(r"results/mast-\d{4}-\d\d-\d\d-\d{6}", str(folder.path))

    def test_two_in_one_second(self, tmp_path, monkeypatch):
        monkeypatch.setattr("roa.sweep.run_folder.datetime", FrozenTime)
        monkeypatch.chdir(tmp_path)
        names = []
        for _ in range(3):
            folder = RunFolder.new(None, "mast.toml")
            folder.path.mkdir(parents=True)
            names.append(folder.path.name)
        assert names == ["mast-then", "mast-then-2", "mast-then-3"]

    def test_empty_folder_will_do(self, tmp_path):
        assert RunFolder.new(tmp_path, "mast.toml").path == tmp_path

    def test_foreign_folder(self, tmp_path):
        for name in "abcd":
            (tmp_path / name).write_text("mine")
        with pytest.raises(UserError, match=r"holds other things \(a, b, c, …\)"):
            RunFolder.new(tmp_path, "mast.toml")

    def test_file(self, tmp_path):
        (tmp_path / "file").write_text("mine")
        with pytest.raises(UserError, match="is a file"):
            RunFolder.new(tmp_path / "file", "mast.toml")

    def test_a_run_is_to_be_resumed(self, tmp_path):
        path = small.sweep(tmp_path / "my run").path
        with pytest.raises(UserError, match=f"roa resume '{path}'"):
            RunFolder.new(path, "mast.toml")

    def test_stopped_before_the_sweep_began(self, tmp_path):
        (tmp_path / "config.toml").write_text(small.make().configuration.text)
        (tmp_path / "run.log").write_text("")
        assert small.sweep(RunFolder.new(tmp_path, "mast.toml").path).sweep.exists()

    def test_configuration_of_somebody_else(self, tmp_path):
        (tmp_path / "config.toml").write_text("title = 'mine'")
        with pytest.raises(UserError, match="another configuration"):
            small.sweep(RunFolder.new(tmp_path, "mast.toml").path)
        assert (tmp_path / "config.toml").read_text() == "title = 'mine'"


def break_off(aside, error):
    aside.write_bytes(b"half")
    raise error


class FrozenTime:
    @classmethod
    def now(cls):
        return cls()

    def __format__(self, specification):
        return "then"


class TestExisting:
    def test_a_run(self, tmp_path):
        path = small.sweep(tmp_path / "run").path
        assert RunFolder.existing(path).sweep.exists()

    @pytest.mark.parametrize("name", ["nowhere", "."])
    def test_no_run(self, tmp_path, name):
        with pytest.raises(UserError, match="no folder with a sweep in it"):
            RunFolder.existing(tmp_path / name)


class TestAtomicWrite:
    def test_appears_with_its_content(self, tmp_path):
        write_atomically(tmp_path / "new" / "file", b"abc")
        assert (tmp_path / "new" / "file").read_bytes() == b"abc"
        assert [entry.name for entry in (tmp_path / "new").iterdir()] == ["file"]

    @pytest.mark.parametrize("error", [ZeroDivisionError, KeyboardInterrupt])
    def test_anything_that_goes_wrong_leaves_the_old_file(self, tmp_path, error):
        path = tmp_path / "file"
        path.write_bytes(b"old")
        with pytest.raises(error), written_aside(path) as aside:
            break_off(aside, error)
        assert path.read_bytes() == b"old"
        assert list(tmp_path.iterdir()) == [path]

    def test_synced_before_it_is_renamed(self, tmp_path, monkeypatch):
        calls = []
        fsync, replace = os.fsync, os.replace
        monkeypatch.setattr(os, "fsync", lambda handle: (calls.append("fsync"), fsync(handle)))
        monkeypatch.setattr(os, "replace", lambda a, b: (calls.append("replace"), replace(a, b)))
        write_atomically(tmp_path / "file", b"abc")
        assert calls == ["fsync", "replace", "fsync"]

    def test_full_disk_is_one_sentence(self, tmp_path, monkeypatch):
        def full(handle):
            raise OSError(28, "No space left on device")

        monkeypatch.setattr(os, "fsync", full)
        with pytest.raises(MachineError, match=r"file: cannot be written .No space left on device"):
            write_atomically(tmp_path / "file", b"abc")
        assert list(tmp_path.iterdir()) == []

    def test_folder_that_cannot_be_made(self, tmp_path):
        (tmp_path / "file").write_text("")
        with pytest.raises(MachineError, match="cannot be written"):
            write_atomically(tmp_path / "file" / "below", b"")
        with pytest.raises(MachineError, match="cannot be written"), RunFolder(tmp_path / "file" / "run").locked():
            pass


class TestLocked:
    def test_clears_what_a_killed_writer_left(self, tmp_path):
        folder = RunFolder(tmp_path)
        folder.figures.mkdir()
        strays = [tmp_path / ".sweep.h5.0123.aside", folder.figures / ".basin.png.4567.aside"]
        for stray in strays:
            stray.write_bytes(b"half")
        with folder.locked():
            assert not any(stray.exists() for stray in strays)

    def test_nested(self, tmp_path):
        folder = RunFolder(tmp_path)
        with folder.locked():
            with folder.locked():
                pass
            assert (tmp_path / "lock").exists()
        assert not (tmp_path / "lock").exists()

    def test_two_writers(self, tmp_path):
        with RunFolder(tmp_path).locked(), pytest.raises(UserError, match="is writing"), RunFolder(tmp_path).locked():
            pass
