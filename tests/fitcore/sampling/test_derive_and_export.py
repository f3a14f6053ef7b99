import csv

import h5py
import numpy as np
import pytest

pytest.importorskip("emcee")

from fitcore.sampling.chain_file import ChainFile
from fitcore.sampling.derive import derive
from fitcore.sampling.export import export
from fitcore.sampling.posterior import sample
from fitcore.sampling.summary import summarise
from fitcore.sampling.verify import verify
from observables.errors import InputError, StoreError, UnknownNameError

OPTIONS = {"walkers": 16, "ensembles": 2, "rng": 1, "check_widths": False, "block_steps": 16}


@pytest.fixture
def problem(problems):
    return problems.gaussian(problems.correlated(3, 0.5))


@pytest.fixture
def path(problem, tmp_path):
    sample(problem, chain_path=tmp_path / "chain.h5", until=40, **OPTIONS)
    return tmp_path / "chain.h5"


class TestDerive:
    def test_values_stand_beside_untouched_samples(self, problem, path):
        with ChainFile.open(path) as chain:
            before = chain.get_chain()
        assert derive(path, problem, ["sum", "phase"]) == {"sum": 40, "phase": 40}
        with ChainFile.open(path) as chain:
            np.testing.assert_array_equal(chain.get_chain(), before)
            assert chain.derived_names == ("phase", "sum")
            found = np.concatenate([b.derived["sum"] for b in chain.blocks(derived=("sum",))])
        np.testing.assert_allclose(found, before.sum(axis=2), rtol=1e-14)
        with h5py.File(path, "r") as file:
            assert file["derived/sum"].attrs["units"] == "1"
            assert file["derived/phase"].dtype == np.complex128
        assert verify(path).derived == {"sum": 40, "phase": 40}

    def test_goes_on_where_it_stopped(self, problem, path):
        derive(path, problem, ["sum"])
        sample(problem, chain_path=path, until=60, **OPTIONS)
        assert "sum is derived for 40 of 60 steps" in verify(path).notices
        with ChainFile.open(path) as chain, pytest.raises(UnknownNameError):
            list(chain.blocks(derived=("sum",)))
        assert derive(path, problem, ["sum", "first_squared"]) == {"sum": 20, "first_squared": 60}
        assert derive(path, problem, ["sum"]) == {"sum": 0}
        with ChainFile.open(path) as chain:
            for block in chain.blocks(derived=("sum",)):
                np.testing.assert_allclose(block.derived["sum"], block.chain.sum(axis=2), rtol=1e-13)

    def test_damage_is_found(self, problem, path):
        derive(path, problem, ["sum"])
        with h5py.File(path, "r+") as file:
            file["derived/sum"][20, 3] += 1e-9
        with pytest.raises(StoreError, match="derived/sum"):
            verify(path)

    def test_other_problem_is_refused(self, problems, path):
        with pytest.raises(StoreError, match="different problem"):
            derive(path, problems.gaussian(np.eye(3), fingerprint="g"), ["sum"])

    def test_unknown_quantity_leaves_the_file_alone(self, problem, path):
        with pytest.raises(KeyError):
            derive(path, problem, ["nonsense"])
        assert verify(path).derived == {}

    def test_is_summarised(self, problem, path):
        derive(path, problem, ["sum", "phase"])
        with ChainFile.open(path) as chain:
            summary = summarise(chain)
            assert [row.name for row in summary.rows] == ["p0", "p1", "p2", "sum"]
            with pytest.raises(InputError, match="complex"):
                summarise(chain, names=["phase"])


class TestExport:
    def test_csv(self, problem, path, tmp_path):
        derive(path, problem, ["sum"])
        with ChainFile.open(path) as chain:
            out = export(chain, tmp_path / "c.csv", format="csv", thin=7, start=3)
            expected = chain.get_chain()
        with out.open() as stream:
            rows = list(csv.reader(stream))
        assert rows[0] == ["step", "walker", "ensemble", "log_posterior", "p0", "p1", "p2", "sum"]
        assert len(rows) == 1 + 6 * 32
        for row in rows[1:]:
            step, walker = int(row[0]), int(row[1])
            assert (step - 3) % 7 == 0
            assert int(row[2]) == walker // 16
            np.testing.assert_array_equal([float(v) for v in row[4:7]], expected[step, walker])

    def test_csv_of_a_complex_quantity_keeps_every_column_real(self, problem, path, tmp_path):
        derive(path, problem, ["sum", "phase"])
        with ChainFile.open(path) as chain:
            out = export(chain, tmp_path / "c.csv", format="csv", thin=20)
            samples = chain.get_chain()[::20].reshape(-1, 3)
        with out.open() as stream:
            head, *rows = csv.reader(stream)
        assert head[4:] == ["p0", "p1", "p2", "phase_re", "phase_im", "sum"]
        table = np.array([[float(cell) for cell in row] for row in rows])
        np.testing.assert_array_equal(table[:, 4:7], samples)
        np.testing.assert_allclose(table[:, 7] + 1j * table[:, 8], np.exp(1j * samples[:, 0]), rtol=1e-14)
        np.testing.assert_allclose(table[:, 9], samples.sum(axis=1), rtol=1e-13)

    def test_npz(self, problem, path, tmp_path):
        derive(path, problem, ["sum", "phase"])
        with ChainFile.open(path) as chain:
            out = export(chain, tmp_path / "c.npz", format="npz", thin=2)
            samples, log_posterior, accepted = chain.read_all()
        with np.load(out, allow_pickle=False) as archive:
            np.testing.assert_array_equal(archive["samples"], samples[::2])
            np.testing.assert_array_equal(archive["log_posterior"], log_posterior[::2])
            np.testing.assert_array_equal(archive["accepted"], accepted[::2])
            np.testing.assert_array_equal(archive["steps"], np.arange(0, 40, 2))
            np.testing.assert_array_equal(archive["ensembles"], np.repeat([0, 1], 16))
            assert archive["derived_sum"].dtype == np.float64
            assert archive["derived_phase"].dtype == np.complex128
            np.testing.assert_allclose(archive["derived_sum"], samples[::2].sum(axis=2))
            np.testing.assert_allclose(archive["derived_phase"], np.exp(1j * samples[::2, :, 0]))
            assert list(archive["parameter_names"]) == ["p0", "p1", "p2"]

    @pytest.mark.filterwarnings("ignore")
    def test_netcdf_is_read_by_arviz(self, problem, path, tmp_path):
        arviz = pytest.importorskip("arviz")
        pytest.importorskip("h5netcdf")
        derive(path, problem, ["sum", "phase"])
        with ChainFile.open(path) as chain:
            out = export(chain, tmp_path / "c.nc", format="netcdf")
            samples, log_posterior, _ = chain.read_all()
        data = arviz.from_netcdf(out, engine="h5netcdf")
        assert data.posterior.sizes == {"chain": 2, "draw": 40 * 16}
        assert set(data.posterior.data_vars) == {"p0", "p1", "p2", "sum", "phase_re", "phase_im"}
        phase = data.posterior["phase_re"].values + 1j * data.posterior["phase_im"].values
        np.testing.assert_allclose(phase, np.exp(1j * data.posterior["p0"].values), rtol=1e-14)
        np.testing.assert_array_equal(data.posterior["p1"].values[1], samples[:, 16:, 1].reshape(-1))
        np.testing.assert_array_equal(data.sample_stats["lp"].values[0], log_posterior[:, :16].reshape(-1))
        assert data.posterior["p0"].attrs["units"] == "1"
        table = arviz.summary(data, kind="stats")
        assert table.loc["p0", "mean"] == pytest.approx(samples[..., 0].mean(), abs=0.01)

    def test_from_memory(self, problem, tmp_path):
        result = sample(problem, until=20, **OPTIONS)
        for format in ("netcdf", "csv", "npz"):
            assert export(result.chain, tmp_path / f"c.{format}", format=format).stat().st_size > 0

    def test_refusals(self, path, tmp_path):
        with ChainFile.open(path) as chain:
            with pytest.raises(InputError, match="format: must be one of netcdf, csv, npz"):
                export(chain, tmp_path / "c.x", format="root")
            with pytest.raises(InputError, match="thin must be"):
                export(chain, tmp_path / "c.csv", format="csv", thin=0)
            with pytest.raises(StoreError, match="no steps from 99"):
                export(chain, tmp_path / "c.csv", format="csv", start=99)
            with pytest.raises(StoreError, match="exists already"):
                export(chain, path, format="npz")
            with pytest.raises(StoreError, match="cannot write"):
                export(chain, tmp_path / "none" / "c.csv", format="csv")
            export(chain, tmp_path / "c.csv", format="csv")
            export(chain, tmp_path / "c.csv", format="csv", overwrite=True)
        assert sorted(p.name for p in tmp_path.iterdir()) == ["c.csv", "chain.h5"]
