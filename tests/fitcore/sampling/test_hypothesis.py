"""Sampling under a hypothesis: its own parameter, its chain file, its evidence."""

import numpy as np
import pytest

pytest.importorskip("emcee")

from fitcore import Problem
from fitcore.commands.chain import problem_of_chain
from fitcore.sampling.chain_file import ChainFile
from fitcore.sampling.derive import derive
from fitcore.sampling.evidence import evidence
from fitcore.sampling.from_fit import modes_of_fit
from fitcore.sampling.posterior import sample
from fitcore.sampling.summary import summarise
from observables import catalogue
from observables.catalogue import Complex
from observables.errors import StoreError, UnknownNameError

NAME = "stretched-Bd"


def register():
    """A stretched B_d mixing amplitude; tests/conftest.py takes it out of the public catalogue again."""
    stretched = catalogue.hypothesis(NAME, title="B_d mixing amplitude times 1 + s", source="invented")
    stretched.parameter(
        "stretch_Bd",
        unit="1",
        start=0.0,
        lower=-1.0,
        upper=2.0,
        scale=0.1,
        title="relative size of the added term",
    )

    @stretched.replaces("M12_Bd")
    def M12_Bd(standard, stretch_Bd) -> Complex:
        return standard * (1.0 + stretch_Bd)


def sampled(hypothesis, path=None):
    problem = Problem.load("averages-2026", hypothesis=hypothesis)
    fit = problem.fit()
    result = sample(
        problem,
        modes=modes_of_fit(problem, fit),
        effective=10_000,
        rng=3,
        chain_path=path,
        check_widths=False,
    )
    assert result.valid, result.diagnostics.advice
    return problem, fit, result


@pytest.mark.slow
@pytest.mark.stat
def test_parameter_and_evidence_of_a_hypothesis():
    register()
    problem, fit, result = sampled(NAME)
    row = summarise(result.chain, names=("stretch_Bd",))["stretch_Bd"]
    low, high = fit.parameters["stretch_Bd"].interval_68
    half = 0.5 * (high - low)
    assert row.mean == pytest.approx(fit.parameters["stretch_Bd"].value, abs=0.25 * half)
    assert row.error == pytest.approx(half, rel=0.15)

    # Evidence of the standard hypothesis over this one, which contains it: posterior over prior density at zero
    # (J. M. Dickey, Annals of Mathematical Statistics 42, 204 (1971)).
    standard, _, plain = sampled("standard")
    wide, narrow = evidence(problem, result.chain, rng=1), evidence(standard, plain.chain, rng=1)
    draws = result.samples("stretch_Bd")
    near = np.abs(draws) < 0.2 * half
    at_zero = near.mean() / (0.4 * half)
    count = near.mean() * float(np.min(result.diagnostics.effective_sample_size))
    expected = np.log(at_zero / (1.0 / 3.0))
    error = np.sqrt(wide.error**2 + narrow.error**2 + 1.0 / count)
    assert narrow.log_evidence - wide.log_evidence == pytest.approx(expected, abs=5.0 * error + 0.02)


def test_chain_file_knows_its_hypothesis(tmp_path):
    """Derived quantities are those of the hypothesis; what is not registered any more is refused."""
    register()
    path = tmp_path / "stretched.h5"
    problem, standard = Problem.load("averages-2026", hypothesis=NAME), Problem.load("averages-2026")
    sample(problem, until=32, rng=1, chain_path=path, check_widths=False)
    again = problem_of_chain(path)
    assert again.hypothesis == NAME
    derive(path, again, ["mixing_frequency_Bd"])
    with ChainFile.open(path) as chain:
        (block, *_) = chain.blocks(derived=("mixing_frequency_Bd",))
    values = problem.values(block.chain.reshape(-1, block.chain.shape[2]), ["mixing_frequency_Bd"])
    np.testing.assert_allclose(block.derived["mixing_frequency_Bd"].ravel(), values["mixing_frequency_Bd"])
    assert block.derived["mixing_frequency_Bd"].mean() == pytest.approx(0.5068, abs=0.001)

    with pytest.raises(StoreError, match="stretch_Bd"):
        ChainFile.resume(path, standard)

    del catalogue._hypotheses[NAME]
    with pytest.raises(UnknownNameError, match=NAME):
        problem_of_chain(path)
    assert ChainFile.open(path).steps == 32
