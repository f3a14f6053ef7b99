import subprocess
import sys
from itertools import pairwise
from pathlib import Path

import numpy as np
import pytest
from scipy import stats

pytest.importorskip("emcee")

from fitcore.sampling.density import credible, density_1d, density_2d, highest_density, shortest_interval
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


def test_summary_says_which_intervals_are_equal_tailed_and_how_the_fit_got_its_own(problems):
    """A parameter without any information, beside one with a measurement."""
    from io import StringIO

    from rich.console import Console

    from fitcore.commands import posterior_tables
    from fitcore.result import Estimate

    problem = problems.AnalyticProblem(
        lambda theta: -0.5 * (theta[:, 0] / 0.1) ** 2, 2, lower=[-1, -1], upper=[1, 1]
    )
    summary = summarise(sample(problem, effective=5000, rng=1, check_widths=False).chain)
    assert [row.kind for row in summary.rows] == ["highest-density", "equal-tailed"]
    assert summary["p1"].intervals[0.6827][0] == pytest.approx((-0.6827, 0.6827), abs=0.03)
    assert summary.to_dict()["parameters"]["p1"]["reason"] == "flat"
    fit = {
        "p0": Estimate(0.0, 0.1, (-0.1, 0.1), (-0.196, 0.196), "linear", "1"),
        "p1": Estimate(0.0, None, (-1.0, 1.0), (-1.0, 1.0), "range", "1"),
    }
    console = Console(width=160, file=StringIO(), no_color=True)
    console.print(posterior_tables.summary(summary, fit))
    lines = console.file.getvalue().splitlines()
    assert any("fit 68.27 %" in line for line in lines)
    assert "] linear" in next(line for line in lines if line.strip().startswith("p0"))
    assert "] range" in next(line for line in lines if line.strip().startswith("p1"))
    assert any("equal-tailed intervals for p1: the density is too flat" in line for line in lines)
    assert "profile" not in console.file.getvalue()


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

    @pytest.mark.stat
    @pytest.mark.parametrize("slope", [0.0, 0.08])
    @pytest.mark.parametrize("size", [2000, 100_000])
    def test_flat_density_gets_equal_tailed_intervals(self, slope, size):
        """On (0, 1) with density 1 + slope (2 x - 1): regions of highest density there would be noise."""
        rng = np.random.default_rng(5)
        share = rng.random(size)
        # Solves x + slope (x^2 - x) = share.
        x = 2 * share / (1 - slope + np.sqrt((1 - slope) ** 2 + 4 * slope * share))
        found = credible(density_1d(x, lower=0, upper=1), (0.6827, 0.9545))
        assert (found.kind, found.reason) == ("equal-tailed", "flat")
        for level, (region,) in found.regions.items():
            expected = np.quantile(x, [0.5 - level / 2, 0.5 + level / 2])
            assert region == pytest.approx(tuple(expected), abs=0.02)

    @pytest.mark.stat
    @pytest.mark.parametrize(
        ("distribution", "bounds"),
        [
            (stats.norm(), (-np.inf, np.inf)),
            (stats.expon(), (0.0, np.inf)),
            (stats.triang(1.0), (0.0, 1.0)),
            (stats.gamma(3), (0.0, np.inf)),
        ],
    )
    def test_density_with_a_top_keeps_regions_of_highest_density(self, distribution, bounds):
        rng = np.random.default_rng(6)
        draws = distribution.rvs(5000, random_state=rng)
        density = density_1d(draws, lower=bounds[0], upper=bounds[1])
        found = credible(density, (0.9545, 0.6827))
        assert found.kind == "highest-density"
        assert list(found.regions) == [0.9545, 0.6827]
        assert found.regions[0.6827] == highest_density(density, 0.6827)

    @pytest.mark.stat
    def test_regions_always_lie_inside_each_other(self):
        """Uniform, uniform with soft edges, top-heavy and double densities, from few to many draws."""
        rng = np.random.default_rng(7)
        kinds = set()
        for number in range(60):
            size = int(10 ** rng.uniform(2, 4.5))
            draws = (
                rng.uniform(-1, 1, size),
                rng.uniform(-1, 1, size) + rng.normal(0, 0.2, size),
                rng.beta(1, 1.4, size),
                np.where(rng.random(size) < 0.4, 0.0, 2.5) + rng.normal(0, 1, size),
            )[number % 4]
            bounds = {"lower": -1.0, "upper": 1.0} if number % 4 == 0 else {}
            found = credible(density_1d(draws, effective=size / 3, **bounds), (0.5, 0.6827, 0.9, 0.9545))
            kinds.add(found.kind)
            regions = list(found.regions.values())
            for inner, outer in pairwise(regions):
                assert all(any(a <= low and high <= b for a, b in outer) for low, high in inner)
        assert kinds == {"highest-density", "equal-tailed"}

    def test_regions_that_are_not_nested_are_replaced(self, monkeypatch):
        from fitcore.sampling import density

        made = density_1d(np.random.default_rng(8).normal(size=5000))
        regions = {0.6827: ((-1.0, 1.0),), 0.9545: ((-0.9, 3.0),)}
        monkeypatch.setattr(density, "highest_density", lambda _, level: regions[level])
        found = credible(made, (0.6827, 0.9545))
        assert (found.kind, found.reason) == ("equal-tailed", "not nested")
        assert found.regions[0.6827][0] == pytest.approx((-1, 1), abs=0.1)

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
        rng = np.random.default_rng(17)
        x, y = rng.random(200_000), rng.standard_normal(200_000)
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
