"""A fit made by hand, so that tables and folders are tested without fitting."""

from __future__ import annotations

import math
from collections.abc import Callable
from pathlib import Path
from typing import Any

import pytest
from click.testing import CliRunner, Result

from fitcore.commands.main import cli
from fitcore.result import Estimate, FitResult, MeasurementRow, OtherMinimum


@pytest.fixture
def result() -> FitResult:
    """A valid fit of three invented measurements."""
    return FitResult(
        valid=True,
        chi2=3.21,
        degrees_of_freedom=2,
        p_value=0.2,
        title="Invented",
        inputs_name="invented",
        inputs_sha256="0123456789abcdef" * 4,
        inputs_revision=3,
        parameters={
            "wolfenstein_lambda": Estimate(
                0.22519, 0.00068, (0.22451, 0.22587), (0.22386, 0.22652), "profile"
            ),
            "wolfenstein_A": Estimate(0.8334, 0.0106, (0.8229, 0.8441), (0.8129, 0.8544), "profile"),
            "wolfenstein_rhobar": Estimate(0.2, None, (0.1, math.inf), (-math.inf, math.inf), "profile"),
            "wolfenstein_etabar": Estimate(0.3),
        },
        derived={
            "jarlskog": Estimate(3.203e-5, 7.0e-7, (3.133e-5, 3.273e-5), (3.066e-5, 3.340e-5), "linear")
        },
        measurements=(
            MeasurementRow(
                "gamma", "angle_gamma", 66.4, 2.7, 2.8, 65.62, 0.28, "deg", "experiment", ("tree",), 1.6
            ),
            MeasurementRow(
                "element-ud",
                "magnitude_V_ud",
                0.97367,
                0.00032,
                0.00032,
                0.97432,
                -2.03,
                "1",
                "experiment",
                ("tree",),
            ),
            MeasurementRow(
                "bag-K", "bag_K", 0.7533, 0.0091, 0.0091, 0.7545, -0.13, "1", "theory", ("lattice",)
            ),
        ),
        parameter_names=("wolfenstein_lambda", "wolfenstein_A", "wolfenstein_rhobar", "wolfenstein_etabar"),
        correlation_names=("wolfenstein_lambda", "wolfenstein_A"),
        correlation_matrix=((1.0, -0.4), (-0.4, 1.0)),
        covariance_matrix=((0.00068**2, -0.4 * 0.00068 * 0.0106), (-0.4 * 0.00068 * 0.0106, 0.0106**2)),
        other_minima=(
            OtherMinimum(
                {
                    "wolfenstein_lambda": 0.2252,
                    "wolfenstein_A": 0.83,
                    "wolfenstein_rhobar": 0.2,
                    "wolfenstein_etabar": -0.3,
                },
                5.5,
            ),
        ),
    )


@pytest.fixture
def weakmix(tmp_path: Path, monkeypatch: pytest.MonkeyPatch) -> Callable[..., Result]:
    """Run a command in an empty folder; stdout and stderr are kept apart."""
    monkeypatch.chdir(tmp_path)
    monkeypatch.delenv("COLUMNS", raising=False)

    def run(*arguments: Any) -> Result:
        return CliRunner().invoke(cli, [str(argument) for argument in arguments], prog_name="weakmix")

    return run


@pytest.fixture
def template(weakmix: Callable[..., Result], tmp_path: Path) -> Path:
    """The file that `weakmix new` writes."""
    path = tmp_path / "template.toml"
    assert weakmix("new", path, "--quiet").exit_code == 0
    return path
