"""The store: layout of the merged file, and files that cannot be used."""

import hashlib
import shutil

import h5py
import numpy as np
import pytest
from sweep import small

import roa.sweep.store as store
from roa.errors import MachineError, UserError
from roa.kernel.outcomes import Outcome, Reason
from roa.sweep.block import Block, blocks_of
from roa.sweep.finished import is_done, look_through, open_partial
from roa.sweep.header import Header
from roa.sweep.kept import row_bytes
from roa.sweep.run_folder import RunFolder, write_atomically
from roa.sweep.status import read_status

STATES = ["x0", "x1"]


@pytest.fixture(scope="module")
def run(tmp_path_factory):
    return small.sweep(tmp_path_factory.mktemp("run") / "a")


@pytest.fixture
def under_way(tmp_path, plan):
    """A sweep of four blocks that stopped before the merge."""
    folder = RunFolder(tmp_path / "run")
    write_atomically(folder.config, plan.configuration.text.encode())
    write_atomically(folder.plan, Header.of(plan).to_json())
    for block in blocks_of(plan.samples, plan.block_size):
        rows = small.ClosedForm().run(plan.design.points(block.first, block.count))
        write_atomically(folder.blocks / block.file_name, store.encode_block(block, plan.fingerprint, rows))
    return folder


def looked_through(folder):
    said = []
    finished = look_through(folder, Header.read(folder.plan), said.append)
    return sorted(block.index for block in finished.separate), said


class TestLayout:
    def test_attributes(self, run, plan):
        text = run.config.read_text()
        with h5py.File(run.sweep) as file:
            attributes = dict(file.attrs)
        assert attributes["title"] == "a loop of the tests"
        assert attributes["layout"] == 1
        assert attributes["config"] == text
        assert attributes["config_sha256"] == hashlib.sha256(text.encode()).hexdigest()
        assert attributes["fingerprint"] == plan.fingerprint
        assert attributes["seed"] == 1
        assert attributes["replicates"] == 16
        assert "V <= 0.25" in attributes["target"]
        assert {"roa_version", "created", "platform", "design", "block_size", "fingerprint_parts"} <= attributes.keys()

    def test_samples(self, run):
        shapes = {"initial": (200, 2), "outcome": (200,), "time": (200,), "final": (200, 2), "peak": (200, 2)}
        with h5py.File(run.sweep) as file:
            group = file["samples"]
            assert list(group.attrs["states"]) == STATES
            assert list(group.attrs["units"]) == ["1", "1"]
            assert group.attrs["strength"] == "simulated"
            assert {name: group[name].shape for name in group} == shapes | {"steps": (200,), "reason": (200,)}
            assert group["initial"].chunks == (small.SIZE, 2)

    def test_enumerations_have_all_names_in_eight_bits(self, run):
        with h5py.File(run.sweep) as file:
            for name, kind in (("outcome", Outcome), ("reason", Reason)):
                dtype = file["samples"][name].dtype
                assert dtype.itemsize == 1
                assert h5py.check_enum_dtype(dtype) == {member.word: member.value for member in kind}

    def test_every_dataset_has_unit_and_description(self, run):
        seen = []

        def check(name, item):
            if isinstance(item, h5py.Dataset):
                assert len(item.attrs["unit"]), name
                assert item.attrs["description"], name
                seen.append(name)

        with h5py.File(run.sweep) as file:
            file.visititems(check)
            assert list(file["samples/final"].attrs["unit"]) == ["1", "1"]
            assert file["samples/time"].attrs["unit"] == "s"
        assert set(seen) == {f"samples/{name}" for name in small.DATASETS} | {
            "bound/P", "bound/level", "bound/equilibrium",
        }  # fmt: skip

    def test_bound(self, run):
        with h5py.File(run.sweep) as file:
            assert file["bound/P"][()].tolist() == [[1, 0], [0, 1]]
            assert file["bound/level"][()] == small.LEVEL
            assert file["bound/equilibrium"][()].tolist() == [0, 0]

    def test_old_readers_can_open_it(self, run):
        # Superblock version 0 is what every HDF5 1.x library reads (HDF5 file format specification, section II.A).
        content = run.sweep.read_bytes()
        assert content[:8] == b"\x89HDF\r\n\x1a\n"
        assert content[8] == 0

    def test_long_configuration(self, tmp_path, plan):
        from dataclasses import replace

        text = "# " + "x" * 200_000
        header = replace(Header.of(plan), config=text, samples=0)
        store.write_samples(tmp_path / "sweep.h5", replace(header, samples=1), [])
        assert store.read_header(tmp_path / "sweep.h5").config == text


class TestReading:
    def test_rows_are_those_of_the_closed_form(self, run, plan):
        samples = store.open_samples(run.sweep)
        expected = small.ClosedForm().run(plan.design.points(0, 200))
        found = samples.read(0, 200)
        for name in small.DATASETS:
            assert np.array_equal(getattr(found, name), getattr(expected, name)), name
        assert found.outcome.dtype == np.uint8
        assert found.outcome.dtype.metadata is None

    def test_what_it_says_of_itself(self, run, plan):
        samples = store.open_samples(run.sweep)
        assert (samples.n, len(samples), samples.replicates, samples.design) == (200, 200, 16, "sobol")
        assert (samples.states, samples.units, samples.partial) == (("x0", "x1"), ("1", "1"), False)
        assert samples.bound["P"].tolist() == [[1, 0], [0, 1]]
        assert samples.attributes["fingerprint"] == plan.fingerprint

    def test_header_comes_back_the_same(self, run):
        assert store.read_header(run.sweep) == Header.read(run.plan)

    def test_chunks(self, run):
        samples = store.open_samples(run.sweep)
        pieces = list(samples.chunks(70))
        assert [first for first, _ in pieces] == [0, 70, 140]
        whole = np.concatenate([rows.initial for _, rows in pieces])
        assert np.array_equal(whole, samples.read(0, 200).initial)

    def test_beyond_the_end(self, run):
        with pytest.raises(IndexError):
            store.open_samples(run.sweep).read(199, 2)

    def test_no_file(self, tmp_path):
        with pytest.raises(MachineError, match=r"sweep\.h5"):
            store.open_samples(tmp_path / "sweep.h5")

    def test_flipped_bit_is_noticed(self, run, tmp_path):
        content = bytearray(run.sweep.read_bytes())
        with h5py.File(run.sweep) as file:
            place = file["samples/time"].id.get_chunk_info(0).byte_offset
        content[place + 5] ^= 1
        path = tmp_path / "sweep.h5"
        path.write_bytes(content)
        with pytest.raises(MachineError, match="cannot be read"):
            store.open_samples(path).read(0, 10)


class TestBlocks:
    def test_whole_blocks_are_found(self, under_way):
        assert looked_through(under_way) == ([0, 1, 2, 3], [])

    @pytest.mark.parametrize("keep", [0, 7, 1000, 0.5, -1])
    def test_truncated_block(self, under_way, keep):
        path = under_way.blocks / "block-000000001.h5"
        content = path.read_bytes()
        path.write_bytes(content[: int(keep * len(content)) if isinstance(keep, float) else keep])
        done, said = looked_through(under_way)
        assert done == [0, 2, 3]
        assert "block-000000001.h5: is damaged" in said[0]

    def test_block_with_a_flipped_bit(self, under_way):
        path = under_way.blocks / "block-000000002.h5"
        content = bytearray(path.read_bytes())
        with h5py.File(path) as file:
            content[file["rows"].id.get_offset() + 100] ^= 4
        path.write_bytes(content)
        done, said = looked_through(under_way)
        assert done == [0, 1, 3]
        assert "checksum" in said[0]

    def test_block_of_another_run(self, under_way):
        path = under_way.blocks / "block-000000000.h5"
        with h5py.File(path, "a") as file:
            file.attrs["fingerprint"] = "0" * 64
        done, said = looked_through(under_way)
        assert done == [1, 2, 3]
        assert "another run" in said[0]

    def test_block_under_another_block_s_name(self, under_way):
        shutil.copy(under_way.blocks / "block-000000000.h5", under_way.blocks / "block-000000001.h5")
        done, said = looked_through(under_way)
        assert done == [0, 2, 3]
        assert "holds 64 starts from 0 on" in said[0]

    def test_foreign_file_is_named_and_left(self, under_way):
        foreign = under_way.blocks / "notes.txt"
        foreign.write_text("mine")
        done, said = looked_through(under_way)
        assert done == [0, 1, 2, 3]
        assert "notes.txt: is no block" in said[0]
        small.sweep(under_way.path)
        assert foreign.read_text() == "mine"
        assert under_way.sweep.exists()

    def test_damaged_blocks_are_computed_again(self, under_way, run):
        (under_way.blocks / "block-000000001.h5").write_bytes(b"")
        (under_way.blocks / "block-000000003.h5").unlink()
        small.sweep(under_way.path)
        assert small.datasets(under_way.sweep) == small.datasets(run.sweep)
        assert not under_way.blocks.exists()
        assert "it counts as not done" in under_way.log.read_text()


OUTCOMES = 'horizon = 10.0\nstore = "outcomes"'


@pytest.fixture(scope="module")
def short(tmp_path_factory):
    return small.sweep(tmp_path_factory.mktemp("short") / "run", sweep=OUTCOMES)


class TestOutcomesAlone:
    def test_what_is_kept_is_the_same(self, short, run):
        kept, every = small.datasets(short.sweep), small.datasets(run.sweep)
        assert {name for name in kept if name.startswith("samples/")} == {"samples/outcome", "samples/time"}
        assert kept == {name: every[name] for name in kept}

    def test_starts_are_made_again_and_the_rest_is_no_number(self, short, plan):
        samples = store.open_samples(short.sweep)
        found = samples.read(70, 60)
        assert np.array_equal(found.initial, plan.design.points(70, 60))
        assert np.array_equal(found.time, small.ClosedForm().run(plan.design.points(70, 60)).time)
        assert np.isnan(found.final).all()
        assert np.isnan(found.peak).all()
        assert (found.steps == -1).all()
        assert samples.attributes["store"] == "outcomes"

    def test_grid(self, tmp_path):
        plan = small.make(100, sweep='design = "grid"\nstore = "outcomes"')
        samples = store.open_samples(small.sweep(tmp_path, plan=plan).sweep)
        assert np.array_equal(samples.read(0, 100).initial, plan.design.points(0, 100))

    def test_blocks_and_extension(self, short, tmp_path, plan):
        small.sweep(tmp_path, 130, sweep=OUTCOMES)
        folder = small.sweep(tmp_path, 200, sweep=OUTCOMES)
        assert small.datasets(folder.sweep) == small.datasets(short.sweep)

    def test_what_is_kept_belongs_to_the_fingerprint(self, tmp_path):
        small.sweep(tmp_path, 200)
        with pytest.raises(UserError, match=r'sweep.store: "all" -> "outcomes"'):
            small.sweep(tmp_path, 200, sweep=OUTCOMES)

    def test_row_is_nine_bytes(self):
        # 1 for the outcome, 8 for the time; all of a start with two states: three states of 16, 8 + 1 + 4 + 1.
        assert (row_bytes("outcomes", 2), row_bytes("all", 2)) == (9, 62)


class TestPartial:
    def test_longest_complete_prefix(self, under_way, plan):
        (under_way.blocks / "block-000000002.h5").unlink()
        samples = open_partial(under_way)
        assert (samples.n, samples.partial) == (128, True)
        assert np.array_equal(samples.read(60, 68).initial, plan.design.points(60, 68))
        assert [first for first, _ in samples.chunks(100)] == [0, 100]

    def test_nothing_yet(self, under_way):
        (under_way.blocks / "block-000000000.h5").unlink()
        samples = open_partial(under_way)
        assert samples.n == 0
        assert samples.read(0, 0).initial.shape == (0, 2)
        assert list(samples.chunks()) == []

    def test_extension_under_way(self, under_way, tmp_path, plan):
        merged = small.sweep(tmp_path / "smaller", 130).sweep
        shutil.copy(merged, under_way.sweep)
        for index in (0, 1, 3):
            (under_way.blocks / f"block-{index:09d}.h5").unlink()
        samples = open_partial(under_way)
        assert samples.n == 192
        assert np.array_equal(samples.read(0, 192).initial, plan.design.points(0, 192))
        assert np.array_equal(samples.read(129, 3).initial, plan.design.points(129, 3))

    def test_finished(self, run):
        samples = open_partial(run)
        assert (samples.n, samples.partial) == (200, False)


class TestAnotherLayout:
    SENTENCE = r"has layout 2, written by roa 9\.9; roa .* reads layout 1: use the version that wrote it"

    @pytest.fixture
    def run(self, tmp_path):
        return small.sweep(tmp_path / "run")

    def test_of_the_plan(self, run):
        # A later layout need not have anything else of this one.
        run.plan.write_text('{"layout": 2, "roa_version": "9.9"}')
        for opened in (read_status, open_partial, is_done):
            with pytest.raises(UserError, match=r"plan\.json: " + self.SENTENCE):
                opened(run)
        before = small.file_identity(run.sweep)
        with pytest.raises(UserError, match=self.SENTENCE):
            small.sweep(run.path)
        assert small.file_identity(run.sweep) == before

    def test_of_the_merged_file(self, run):
        with h5py.File(run.sweep, "a") as file:
            file.attrs["layout"], file.attrs["roa_version"] = 2, "9.9"
            del file["bound"]
        for opened in (read_status, open_partial, is_done):
            with pytest.raises(UserError, match=r"sweep\.h5: " + self.SENTENCE):
                opened(run)

    def test_none_at_all_is_damage(self, run):
        run.plan.write_text("{}")
        with pytest.raises(MachineError, match="is damaged"):
            read_status(run)


def test_done_is_with_the_samples_asked_for(run, under_way):
    assert is_done(run)
    assert is_done(run, 200)
    assert not is_done(run, 300)
    assert not is_done(under_way)


def test_merge_that_reads_back_wrong_keeps_the_old_file(tmp_path, plan, monkeypatch):
    path = tmp_path / "sweep.h5"
    path.write_text("old")
    read_back = store._read_back

    def damaged(aside, path, names):
        with h5py.File(aside) as file:
            place = file["samples/peak"].id.get_chunk_info(0).byte_offset
        content = bytearray(aside.read_bytes())
        content[place] ^= 1
        aside.write_bytes(content)
        read_back(aside, path, names)

    monkeypatch.setattr(store, "_read_back", damaged)
    rows = small.ClosedForm().run(plan.design.points(0, 200))
    columns = {name: getattr(rows, name) for name in small.DATASETS}
    with pytest.raises(MachineError, match=r"sweep\.h5: cannot be read back, mistrust the disk"):
        store.write_samples(path, Header.of(plan), [(Block(0, 0, 200), columns)])
    assert path.read_text() == "old"
    assert list(tmp_path.iterdir()) == [path]
