"""One conformance suite for emcee's in-memory backend, ours, and the chain file; then what can go wrong."""

import json
import os
import socket
import subprocess
import sys
from dataclasses import replace
from pathlib import Path

import numpy as np
import pytest

emcee = pytest.importorskip("emcee")
h5py = pytest.importorskip("h5py")

from emcee.backends import Backend  # noqa: E402

from fitcore.sampling.chain_file import ChainFile  # noqa: E402
from fitcore.sampling.chain_format import ChainHeader  # noqa: E402
from fitcore.sampling.memory_chain import MemoryChain  # noqa: E402
from fitcore.sampling.verify import verify  # noqa: E402
from observables.errors import StoreError, UnknownNameError  # noqa: E402

WALKERS, N = 16, 3


def header(fingerprint="f"):
    return ChainHeader(
        parameter_names=tuple(f"p{i}" for i in range(N)),
        ensembles=tuple([0] * 8 + [1] * 8),
        fingerprint=fingerprint,
        parameter_units=("1",) * N,
        inputs_toml="title = 'x'\n",
    )


def log_density(theta):
    return -0.5 * np.einsum("ij,ij->i", theta, theta)


def run(backend, steps, start=None):
    sampler = emcee.EnsembleSampler(WALKERS, N, log_density, backend=backend, vectorize=True)
    if start is None:
        random = np.random.RandomState(4)
        start = emcee.State(random.standard_normal((WALKERS, N)), random_state=random.get_state())
    sampler.run_mcmc(start, steps)
    return sampler


@pytest.fixture(params=["emcee", "memory", "file"])
def backend(request, tmp_path):
    if request.param == "emcee":
        empty = Backend()
        empty.reset(WALKERS, N)
        yield empty
    elif request.param == "memory":
        yield MemoryChain(header(), block_steps=8)
    else:
        with ChainFile.create(tmp_path / "chain.h5", header(), block_steps=8) as chain:
            yield chain


class TestBackendConformance:
    def test_empty(self, backend):
        assert backend.initialized
        assert backend.shape == (WALKERS, N)
        assert backend.iteration == 0
        assert backend.random_state is None
        assert not backend.has_blobs()
        for read in (backend.get_chain, backend.get_log_prob, backend.get_last_sample):
            with pytest.raises(AttributeError):
                read()

    @pytest.mark.parametrize("steps", [1, 7, 8, 9, 21])
    def test_holds_what_a_plain_run_gives(self, backend, steps):
        reference = run(None, steps)
        run(backend, steps)
        assert backend.iteration == steps
        for flat in (False, True):
            for thin, discard in ((1, 0), (2, 0), (3, 4), (1, steps - 1)):
                options = {"flat": flat, "thin": thin, "discard": discard}
                np.testing.assert_array_equal(backend.get_chain(**options), reference.get_chain(**options))
                np.testing.assert_array_equal(
                    backend.get_log_prob(**options), reference.get_log_prob(**options)
                )
        assert backend.get_blobs() is None
        np.testing.assert_array_equal(backend.accepted, reference.backend.accepted)

    def test_last_sample_carries_everything_to_go_on(self, backend):
        reference = run(None, 21)
        run(backend, 13)
        last = backend.get_last_sample()
        np.testing.assert_array_equal(last.coords, reference.get_chain()[12])
        np.testing.assert_array_equal(last.random_state[1], backend.random_state[1])
        run(backend, 8, start=last)
        np.testing.assert_array_equal(backend.get_chain(), reference.get_chain())
        np.testing.assert_array_equal(backend.random_state[1], reference.random_state[1])

    def test_wrong_shapes_are_refused(self, backend):
        backend.grow(1, None)
        state = emcee.State(np.zeros((WALKERS, N + 1)), log_prob=np.zeros(WALKERS))
        with pytest.raises(ValueError, match="coordinate dimensions"):
            backend.save_step(state, np.zeros(WALKERS, dtype=bool))
        state = emcee.State(np.zeros((WALKERS, N)), log_prob=np.zeros(WALKERS))
        with pytest.raises(ValueError, match="acceptance size"):
            backend.save_step(state, np.zeros(3, dtype=bool))


@pytest.mark.parametrize("kind", ["memory", "file"])
def test_blocks_give_the_whole_chain(kind, tmp_path):
    chain = MemoryChain(header(), block_steps=8) if kind == "memory" else ChainFile.create(
        tmp_path / "c.h5", header(), block_steps=8
    )  # fmt: skip
    run(chain, 21)
    chain.commit()
    for start in (0, 5, 8, 20):
        blocks = list(chain.blocks(start))
        assert blocks[0].start == start
        np.testing.assert_array_equal(
            np.concatenate([b.chain for b in blocks]), chain.get_chain(discard=start)
        )
    np.testing.assert_array_equal(sum(b.accepted.sum(axis=0) for b in chain.blocks()), chain.accepted)
    chain.close()


@pytest.fixture
def finished(tmp_path):
    path = tmp_path / "chain.h5"
    with ChainFile.create(path, header(), block_steps=8) as chain:
        chain.write_proposal({"weights": np.ones(1), "means": np.zeros((1, N))})
        run(chain, 40)
    return path


class TestFile:
    def test_is_readable_by_any_hdf5_tool(self, finished):
        with h5py.File(finished, "r") as file:
            assert file.attrs["format_name"] == "weakmix-chain"
            assert file.attrs["format_version"] == 1
            assert file["committed_steps"][()] == 40
            assert file["chain"].shape == (40, WALKERS, N)
            assert file["chain"].dtype == np.float64
            assert json.loads(file.attrs["parameter_names"]) == ["p0", "p1", "p2"]
            assert file.attrs["fingerprint"] == "f"
            assert file.attrs["inputs_toml"] == "title = 'x'\n"
            np.testing.assert_array_equal(file["chain"].attrs["ensembles"], header().ensembles)

            def has_units(name, item):
                if isinstance(item, h5py.Dataset):
                    assert "units" in item.attrs, name
                    assert "long_name" in item.attrs, name

            file.visititems(has_units)

    def test_long_inputs_fit(self, tmp_path):
        text = "title = 'long'\n" + "# x\n" * 100_000
        with ChainFile.create(tmp_path / "c.h5", replace(header(), inputs_toml=text)):
            pass
        with ChainFile.open(tmp_path / "c.h5") as chain:
            assert chain.header.inputs_toml == text

    def test_header_survives(self, finished):
        with ChainFile.open(finished) as chain:
            assert chain.header == header()

    def test_leaves_nothing_else_behind(self, finished):
        assert [p.name for p in finished.parent.iterdir()] == ["chain.h5"]

    def test_reserved_room_is_given_back(self, finished):
        assert finished.stat().st_size < 300_000

    def test_reader_works_while_a_writer_does(self, finished):
        with ChainFile.resume(finished) as writer:
            run(writer, 12, start=writer.get_last_sample())
            with ChainFile.open(finished) as reader:
                assert reader.steps == 48
                assert len(list(reader.blocks())) == 6
            run(writer, 4, start=writer.get_last_sample())
        assert verify(finished).steps == 56

    def test_several_short_blocks(self, finished):
        for _ in range(3):
            with ChainFile.resume(finished) as chain:
                run(chain, 3, start=chain.get_last_sample())
        assert verify(finished).blocks == 8
        with ChainFile.open(finished) as chain:
            np.testing.assert_array_equal(chain.get_chain(), run(None, 49).get_chain())

    def test_is_never_wiped(self, finished):
        with ChainFile.resume(finished) as chain:
            with pytest.raises(StoreError, match="never wiped"):
                chain.reset(WALKERS, N)
            with pytest.raises(StoreError, match="fixed once steps"):
                chain.write_proposal({})
        assert verify(finished).steps == 40

    def test_unknown_content(self, finished):
        with ChainFile.open(finished) as chain, pytest.raises(UnknownNameError):
            list(chain.blocks(derived=("angle",)))

    def test_reading_only(self, finished):
        with ChainFile.open(finished) as chain, pytest.raises(StoreError, match="reading only"):
            chain.save_step(chain.get_last_sample(), np.zeros(WALKERS, dtype=bool))


class TestTrouble:
    def test_existing_file_is_not_overwritten(self, finished):
        before = finished.read_bytes()
        with pytest.raises(StoreError, match="exists already"):
            ChainFile.create(finished, header())
        assert finished.read_bytes() == before

    def test_missing_file(self, tmp_path):
        for way in (ChainFile.open, ChainFile.resume):
            with pytest.raises(StoreError, match="does not exist"):
                way(tmp_path / "none.h5")

    @pytest.mark.parametrize("content", [b"", b"not hdf5 at all" * 100])
    def test_something_else_is_not_an_empty_chain(self, tmp_path, content):
        path = tmp_path / "c.h5"
        path.write_bytes(content)
        for way in (ChainFile.open, ChainFile.resume):
            with pytest.raises(StoreError, match="cannot open"):
                way(path)
        assert path.read_bytes() == content

    def test_other_hdf5_file_says_what_it_holds(self, tmp_path):
        with h5py.File(tmp_path / "c.h5", "w") as file:
            file.create_dataset("mcmc", data=np.zeros((3, 2)))
        with pytest.raises(StoreError, match=r"not a chain file; it holds mcmc \(3, 2\)"):
            ChainFile.open(tmp_path / "c.h5")

    @pytest.mark.parametrize("share", [0.02, 0.3, 0.6, 0.9, 0.999])
    def test_truncated_file(self, finished, share):
        content = finished.read_bytes()
        finished.write_bytes(content[: int(len(content) * share)])
        for way in (verify, ChainFile.resume):
            with pytest.raises(StoreError):
                way(finished)

    def test_newer_format(self, finished):
        with h5py.File(finished, "r+") as file:
            file.attrs["format_version"] = 2
        for way in (ChainFile.open, ChainFile.resume):
            with pytest.raises(StoreError, match="format version 2 is newer than 1"):
                way(finished)

    def test_flipped_byte_in_every_dataset_is_found(self, finished):
        for name in ("chain", "log_posterior", "accepted", "random_state"):
            with h5py.File(finished, "r+") as file:
                where = (20,) + (0,) * (file[name].ndim - 1) if name != "random_state" else (2, 5)
                old = file[name][where]
                file[name][where] = old + 1
            with pytest.raises(StoreError, match="steps 16 to 23 do not match"):
                verify(finished)
            with h5py.File(finished, "r+") as file:
                file[name][where] = old
        verify(finished)

    def test_flipped_header(self, finished):
        with h5py.File(finished, "r+") as file:
            file.attrs["inputs_toml"] = "title = 'y'\n"
        with pytest.raises(StoreError, match="header does not match"):
            verify(finished)

    @pytest.mark.parametrize("value", [0, 8, 41, -1, 10**12])
    def test_flipped_number_of_steps(self, finished, value):
        with h5py.File(finished, "r+") as file:
            file["committed_steps"][()] = value
        with pytest.raises(StoreError, match="damaged"):
            verify(finished)

    @pytest.mark.slow
    def test_any_flipped_byte_is_found_or_harmless(self, finished):
        with ChainFile.open(finished) as chain:
            reference, words = chain.read_all(), chain.random_state[1]
        content = bytearray(finished.read_bytes())
        rng = np.random.default_rng(8)
        found = 0
        for position in rng.integers(len(content), size=1000):
            bit = 1 << int(rng.integers(8))
            content[position] ^= bit
            finished.write_bytes(content)
            content[position] ^= bit
            try:
                verify(finished)
            except StoreError:
                found += 1
                continue
            with ChainFile.open(finished) as chain:
                for a, b in zip(chain.read_all(), reference, strict=True):
                    np.testing.assert_array_equal(a, b)
                np.testing.assert_array_equal(chain.random_state[1], words)
        assert found > 100

    def test_half_written_tail_is_ignored_and_reported(self, finished):
        with ChainFile.open(finished) as chain:
            whole = chain.get_chain()
        with h5py.File(finished, "r+") as file:
            for name in ("chain", "log_posterior", "accepted"):
                file[name].resize(45, axis=0)
            file["chain"][40:] = 7.0
            file["bookkeeping/closed_at"][()] = -1
        report = verify(finished)
        assert report.steps == 40
        assert "5 steps after step 40" in report.notices[0]
        with ChainFile.resume(finished) as chain:
            np.testing.assert_array_equal(chain.get_chain(), whole)
            run(chain, 3, start=chain.get_last_sample())
        with ChainFile.open(finished) as chain:
            np.testing.assert_array_equal(chain.get_chain(), run(None, 43).get_chain())

    def test_stale_table_entries_after_the_last_block_do_no_harm(self, finished):
        """A writer may die between making room in a table and filling it."""
        for value in (0, 3, 40, 10**9):
            with h5py.File(finished, "r+") as file:
                file["bookkeeping/block_end"].resize(6, axis=0)
                file["bookkeeping/block_end"][5] = value
                file["bookkeeping/closed_at"][()] = -1
            assert verify(finished).steps == 40
        with ChainFile.resume(finished) as chain:
            run(chain, 3, start=chain.get_last_sample())
        assert verify(finished).steps == 43

    def test_second_writer_is_refused_with_the_first_ones_host_and_process(self, finished):
        script = (
            "import sys; from fitcore.sampling.chain_file import ChainFile\n"
            f"c = ChainFile.resume({str(finished)!r}); print('open', flush=True); sys.stdin.read()"
        )
        root = str(Path(__file__).parents[3])
        with subprocess.Popen(
            [sys.executable, "-c", script], stdin=subprocess.PIPE, stdout=subprocess.PIPE, cwd=root
        ) as process:
            assert process.stdout.readline().strip() == b"open"
            with pytest.raises(StoreError, match=f"process {process.pid} on host {socket.gethostname()}"):
                ChainFile.resume(finished)
            assert ChainFile.open(finished).steps == 40
            process.kill()
            process.wait()
        # The lock of a killed writer is taken over.
        with ChainFile.resume(finished) as chain:
            assert chain.steps == 40
        assert verify(finished).steps == 40

    def test_second_writer_in_the_same_process(self, finished):
        with ChainFile.resume(finished), pytest.raises(StoreError, match="being written by"):
            ChainFile.resume(finished)

    def test_lock_of_another_host_is_respected(self, finished):
        lock = finished.with_name("chain.h5.lock")
        lock.write_text(json.dumps({"host": "elsewhere", "pid": 1, "since": "2026-01-01"}))
        with pytest.raises(StoreError, match=r"process 1 on host elsewhere .*remove .*chain\.h5\.lock"):
            ChainFile.resume(finished)

    def test_folder_that_cannot_be_written(self, monkeypatch, tmp_path):
        def refuse(*arguments):
            raise PermissionError(13, "Permission denied")

        monkeypatch.setattr(os, "open", refuse)
        with pytest.raises(StoreError, match=r"cannot write here .Permission denied"):
            ChainFile.create(tmp_path / "c.h5", header())

    @pytest.mark.skipif(os.geteuid() == 0, reason="root writes everywhere")
    def test_read_only_folder(self, finished):
        finished.parent.chmod(0o500)
        try:
            with pytest.raises(StoreError, match="cannot write here"):
                ChainFile.resume(finished)
            assert verify(finished).steps == 40
        finally:
            finished.parent.chmod(0o700)

    def test_missing_folder(self, tmp_path):
        with pytest.raises(StoreError, match="cannot write here"):
            ChainFile.create(tmp_path / "none" / "c.h5", header())

    def test_full_disk_while_writing(self, finished, monkeypatch):
        def full(*arguments):
            raise OSError(28, "No space left on device")

        with ChainFile.resume(finished) as chain:
            monkeypatch.setattr(os, "posix_fallocate", full)
            with pytest.raises(StoreError, match=r"No space left.*40 steps are safe"):
                run(chain, 8, start=chain.get_last_sample())
        monkeypatch.undo()
        assert verify(finished).steps == 40

    def test_problem_of_another_fingerprint_is_refused_with_differences(self, finished, problems):
        problem = problems.gaussian(np.eye(N), fingerprint="g")
        with pytest.raises(StoreError, match="different problem") as caught:
            ChainFile.resume(finished, problem)
        assert "-title = 'x'" in str(caught.value)
        assert "+title = 'g'" in str(caught.value)
        # The refusal left no lock behind.
        with ChainFile.resume(finished) as chain:
            assert chain.steps == 40

    def test_changed_parameters_are_named(self, tmp_path, problems):
        old = problems.gaussian(np.eye(2), lower=[0, 0], upper=[1, 1], fingerprint="a")
        new = problems.gaussian(np.eye(3), lower=[0, 0, 0], upper=[1, 2, 1], fingerprint="b")
        head = ChainHeader.for_problem(old, (0, 0, 1, 1))
        with ChainFile.create(tmp_path / "c.h5", head):
            pass
        with pytest.raises(StoreError) as caught:
            ChainFile.resume(tmp_path / "c.h5", new)
        text = str(caught.value)
        assert "parameters only in the present problem: p2" in text
        assert "parameters p1: " in text
        assert "'upper': 1.0" in text


def test_reading_a_chain_needs_no_sampler():
    """emcee takes a second to import; looking at a chain must not pay for it."""
    script = (
        "import sys\n"
        "import fitcore.sampling.verify, fitcore.sampling.summary, fitcore.sampling.export\n"
        "import fitcore.sampling.derive, fitcore.sampling.posterior\n"
        "print([m for m in ('emcee', 'h5py', 'scipy', 'matplotlib') if m in sys.modules])"
    )
    found = subprocess.run(
        [sys.executable, "-c", script],
        check=True,
        capture_output=True,
        text=True,
        cwd=Path(__file__).parents[3],
    )
    assert found.stdout.strip() == "[]"
