import subprocess
import sys
from pathlib import Path

import numpy as np
import pytest
from scipy import stats

pytest.importorskip("emcee")

from fitcore.sampling.density import density_1d, density_2d, highest_density, shortest_interval
from fitcore.sampling.posterior import sample
from fitcore.sampling.summary import summarise
from observables.errors import InputError, UnknownNameError


@pytest.fixture(scope="module")
def gaussian_result(problems):
    problem = problems.gaussian(np.diag([1.0, 4.0]), np.array([0.0, 3.0]))
    return sample(problem, modes=[(np.array([0.0, 3.0]), np.diag([1.0, 4.0]), 1.0)], effective=40_000, rng=1)


@pytest.mark.stat
@pytest.mark.parametrize("kind", ["highest-density", "equal-tailed"])
def test_gaussian_intervals(gaussian_result, kind):
    summary = summarise(gaussian_result.chain, kind=kind)
    for name, mean, width in (("p0", 0.0, 1.0), ("p1", 3.0, 2.0)):
        row = summary[name]
        assert row.mean == pytest.approx(mean, abs=5 * row.mean_error)
        assert row.error == pytest.approx(width, rel=0.03)
        ((low, high),) = row.intervals[0.6827]
        # The ends of a highest-density interval scatter more than quantiles: the density is flat there.
        assert (low, high) == pytest.approx((mean - width, mean + width), abs=0.06 * width)
        ((low, high),) = row.intervals[0.9545]
        assert (low, high) == pytest.approx((mean - 2 * width, mean + 2 * width), abs=0.1 * width)
    assert summary.to_dict()["parameters"]["p0"]["unit"] == "1"


def test_names_and_credibilities_are_checked(gaussian_result):
    chain = gaussian_result.chain
    with pytest.raises(UnknownNameError, match="p2"):
        summarise(chain, names=["p2"])
    with pytest.raises(InputError, match="between 0 and 1"):
        summarise(chain, cl=[68.0])
    with pytest.raises(InputError, match="kind"):
        summarise(chain, kind="widest")
    assert [row.name for row in summarise(chain, names=["p1"]).rows] == ["p1"]
    with pytest.raises(UnknownNameError):
        summarise(chain)["q"]


class TestDensity:
    rng = np.random.default_rng(3)

    @pytest.mark.stat
    @pytest.mark.parametrize(
        ("distribution", "bounds"),
        [
            (stats.norm(), (-np.inf, np.inf)),
            (stats.uniform(), (0.0, 1.0)),
            (stats.expon(), (0.0, np.inf)),
            (stats.t(3), (-np.inf, np.inf)),
        ],
    )
    def test_close_to_the_truth(self, distribution, bounds):
        draws = distribution.rvs(100_000, random_state=self.rng)
        found = density_1d(draws, lower=bounds[0], upper=bounds[1])
        step = found.grid[1] - found.grid[0]
        assert np.abs(found.density - distribution.pdf(found.grid)).sum() * step < 0.05

    def test_narrow_modes_far_apart_keep_their_widths(self):
        draws = np.concatenate([self.rng.normal(0, 1, 50_000), self.rng.normal(100, 1, 50_000)])
        assert density_1d(draws).bandwidth < 0.4

    @pytest.mark.stat
    def test_disconnected_region(self):
        draws = np.concatenate([self.rng.normal(0, 1, 60_000), self.rng.normal(10, 0.5, 60_000)])
        regions = highest_density(density_1d(draws), 0.9)
        assert len(regions) == 2
        mixture = [stats.norm(0, 1), stats.norm(10, 0.5)]
        mass = sum(0.5 * (m.cdf(b) - m.cdf(a)) for m in mixture for a, b in regions)
        assert mass == pytest.approx(0.9, abs=0.01)
        # Highest density: the same height at all four ends.
        heights = [0.5 * sum(m.pdf(x) for m in mixture) for region in regions for x in region]
        assert np.ptp(heights) < 0.15 * np.mean(heights)

    @pytest.mark.parametrize("effective", [None, 2000])
    def test_a_plateau_is_one_region(self, effective):
        draws = self.rng.uniform(-1, 1, 20_000)
        regions = highest_density(density_1d(draws, lower=-1, upper=1, effective=effective), 0.6827)
        assert len(regions) == 1
        assert np.diff(regions[0])[0] == pytest.approx(2 * 0.6827, abs=0.05)

    def test_region_at_an_edge_ends_there(self):
        draws = self.rng.exponential(size=50_000)
        ((low, high),) = highest_density(density_1d(draws, lower=0.0), 0.6827)
        assert low == pytest.approx(0.0, abs=1e-4)
        assert high == pytest.approx(-np.log(1 - 0.6827), abs=0.03)

    def test_constant(self):
        ((low, high),) = highest_density(density_1d(np.full(100, 2.0)), 0.68)
        assert low == pytest.approx(2.0)
        assert high == pytest.approx(2.0)

    def test_shortest_interval(self):
        assert shortest_interval(np.array([0.0, 1.0, 1.1, 1.2, 1.3, 5.0]), 0.5) == (1.0, 1.3)

    @pytest.mark.stat
    @pytest.mark.parametrize("cl", [0.6827, 0.9545])
    def test_plane(self, cl):
        x, y = self.rng.multivariate_normal([0, 0], [[1, 0.8], [0.8, 1]], 200_000).T
        found = density_2d(x, y)
        area = (found.x[1] - found.x[0]) * (found.y[1] - found.y[0])
        inside = area * (found.density >= found.level(cl)).sum()
        # An ellipse of chi2 < q holds cl of a plane: its area is pi q sqrt(det).
        assert inside == pytest.approx(np.pi * stats.chi2(2).ppf(cl) * 0.6, rel=0.08)
        assert found.density.sum() * area == pytest.approx(1.0)

    @pytest.mark.stat
    @pytest.mark.parametrize("correlation", [0.0, 0.8, -0.99])
    def test_regions_of_few_draws_are_not_too_large(self, correlation):
        """True content of regions from 2,000 draws: smoothing must not blow them up."""
        covariance = [[1.0, correlation], [correlation, 1.0]]
        contents = []
        for _ in range(8):
            found = density_2d(*self.rng.multivariate_normal([0, 0], covariance, 2000).T)
            points = np.stack(np.meshgrid(found.x, found.y), axis=-1)
            true = stats.multivariate_normal([0, 0], covariance).pdf(points)
            true /= true.sum()
            contents.append([true[found.density >= found.level(cl)].sum() for cl in (0.6827, 0.9545)])
        np.testing.assert_allclose(np.mean(contents, axis=0), [0.6827, 0.9545], atol=0.025)

    def test_plane_at_an_edge_keeps_its_height(self):
        x, y = self.rng.random(200_000), self.rng.standard_normal(200_000)
        found = density_2d(x, y, bounds=((0.0, 1.0), (-np.inf, np.inf)))
        middle = found.density[np.abs(found.y).argmin()]
        np.testing.assert_allclose(middle, stats.norm.pdf(0.0), rtol=0.05)


@pytest.mark.slow
def test_two_gibibytes_are_summarised_and_drawn_in_less_than_one(tmp_path):
    script = """
import resource, sys
from pathlib import Path
import numpy as np
from emcee.state import State
from fitcore.figures import posterior
from fitcore.figures.style import save
from fitcore.sampling.chain_file import ChainFile
from fitcore.sampling.chain_format import ChainHeader
from fitcore.sampling.diagnostics import diagnose
from fitcore.sampling.summary import summarise
def peak():
    # Linux counts the memory of the process that started this one in ru_maxrss; its own is in VmHWM.
    if sys.platform == "linux":
        with open("/proc/self/status") as status:
            return next(int(line.split()[1]) for line in status if line.startswith("VmHWM")) * 1024
    return resource.getrusage(resource.RUSAGE_SELF).ru_maxrss * (1 if sys.platform == "darwin" else 1024)
walkers, n = 256, 30
path, folder = sys.argv[1], Path(sys.argv[2])
header = ChainHeader(
    tuple(f"p{i}" for i in range(n)), tuple(np.repeat([0, 1, 2, 3], 64)), "f", parameter_units=("1",) * n
)
rng = np.random.default_rng(1)
random_state = np.random.RandomState(1).get_state()
steps = 2**31 // (walkers * n * 8) + 1
with ChainFile.create(path, header, block_steps=64) as chain:
    pool = rng.standard_normal((97, walkers, n))
    moved = np.ones(walkers, dtype=bool)
    for t in range(steps):
        chain.save_step(State(np.roll(pool[t % 97], t % 89, axis=0), np.zeros(walkers), None, random_state), moved)
peaks = [peak()]
with ChainFile.open(path) as chain:
    summarise(chain)
    diagnose(chain)
    peaks.append(peak())
    save(posterior.densities(chain), folder, "densities")
    save(posterior.plane(chain, "p0", "p1"), folder, "plane")
    save(posterior.triangle(chain), folder, "triangle")
    peaks.append(peak())
print(*peaks)
"""
    path = tmp_path / "long.h5"
    run = subprocess.run(
        [sys.executable, "-c", script, str(path), str(tmp_path)],
        capture_output=True, text=True, cwd=Path(__file__).parents[3],
    )  # fmt: skip
    assert run.returncode == 0, run.stderr
    written, summarised, drawn = (int(v) for v in run.stdout.split())
    print(f"peak MiB: written {written >> 20}, summarised {summarised >> 20}, drawn {drawn >> 20}")
    assert path.stat().st_size > 2**31
    assert written < 2**29
    assert max(summarised, drawn) < 2**30
    assert (tmp_path / "triangle.png").exists()
    path.unlink()
