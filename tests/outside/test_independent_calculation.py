"""Every quantity of the first physics against a second calculation, far from where nature is.

The second calculation (`independent_physics.py`) is scalar mpmath in textbook form, written from the published
formulas named there without reading the functions under test; it shares values of constants, never formulas.
The points are spread over a wide region with a fixed seed: all four sign combinations of rho-bar and eta-bar,
matrix parameters far from their measured values, every other parameter moved by up to 40 %.

The promise to users is agreement to 2e-3. Two correct double-precision calculations of a closed formula differ
by rounding only, so the tolerance here is 1e-9: room for cancellations such as 1 - |V_ub|^2 or the two parts of
epsilon_K, and for the numerical integrals (K -> pi l nu, running coupling).
"""

from __future__ import annotations

from collections.abc import Mapping

import independent_physics
import numpy as np
import pytest

from observables import catalogue

TOLERANCE = 1e-9
N_POINTS = 12
SEED = 20260601

#: Modules whose quantities must all appear in the second calculation: a new quantity there is repeated too.
MODULES = (
    "beta_decays",
    "cp_asymmetries",
    "kaon_phase_space",
    "leptonic_decays",
    "mixing_matrix",
    "neutral_mixing",
    "kaon_mixing",
    "scale_evolution",
    "semileptonic_decays",
)
#: Quantity -> why it has no second calculation.
NOT_REPEATED: dict[str, str] = {}

MATRIX_RANGES = {
    "wolfenstein_lambda": (0.05, 0.6),
    "wolfenstein_A": (0.2, 1.5),
    "wolfenstein_rhobar": (0.05, 1.2),
    "wolfenstein_etabar": (0.05, 1.2),
}


def quantities_of_modules() -> list[str]:
    """Names of the quantities declared in `MODULES`."""
    return [
        name
        for name in catalogue.names("quantity")
        if catalogue[name].function.__module__.rpartition(".")[2] in MODULES
    ]


def random_points() -> dict[str, np.ndarray]:
    """Parameter values, one array of `N_POINTS` per name."""
    rng = np.random.default_rng(SEED)
    points = {}
    for name in sorted(catalogue.names("parameter")):
        node = catalogue[name]
        if name in MATRIX_RANGES:
            points[name] = rng.uniform(*MATRIX_RANGES[name], N_POINTS)
            continue
        reach = max(0.4 * abs(node.start), 10.0 * node.scale)
        low, high = max(node.start - reach, node.lower), min(node.start + reach, node.upper)
        points[name] = rng.uniform(low, high, N_POINTS)
    quarter = np.arange(N_POINTS) % 4
    points["wolfenstein_rhobar"] *= np.where(quarter % 2, -1.0, 1.0)
    points["wolfenstein_etabar"] *= np.where(quarter // 2, -1.0, 1.0)
    return points


def distance(name: str, ours: complex, independent: complex) -> float:
    """Relative distance; angles that repeat are compared the short way round, relative to their period."""
    period = catalogue[name].period
    if period is not None:
        turns = (ours - independent).real / period
        return abs(turns - round(turns))
    return abs(ours - independent) / abs(independent)


@pytest.fixture(scope="module")
def points() -> dict[str, np.ndarray]:
    return random_points()


@pytest.fixture(scope="module")
def independent(points: Mapping[str, np.ndarray]) -> list[dict[str, complex]]:
    constants = {name: float(catalogue[name].value) for name in catalogue.names("constant")}
    rows = []
    for row in range(N_POINTS):
        values = constants | {name: float(column[row]) for name, column in points.items()}
        rows.append({k: complex(v) for k, v in independent_physics.all_quantities(values).items()})
    return rows


def test_every_quantity_has_a_second_calculation(independent: list[dict[str, complex]]) -> None:
    missing = set(quantities_of_modules()) - set(independent[0]) - set(NOT_REPEATED)
    assert not missing, (
        f"add these to tests/support/independent_physics.py, or to NOT_REPEATED with the reason: {missing}"
    )
    assert not set(independent[0]) - set(catalogue.names("quantity")), (
        "the second calculation names strangers"
    )


def test_the_points_lie_far_from_nature(points: Mapping[str, np.ndarray]) -> None:
    signs = set(zip(points["wolfenstein_rhobar"] > 0, points["wolfenstein_etabar"] > 0, strict=True))
    assert len(signs) == 4
    assert np.ptp(points["wolfenstein_lambda"]) > 0.3


def test_catalogue_agrees_with_the_second_calculation(
    points: Mapping[str, np.ndarray], independent: list[dict[str, complex]]
) -> None:
    names = sorted(independent[0])
    computed = catalogue.compute(names, points)
    wrong = {}
    for name in names:
        column = np.broadcast_to(computed[name], N_POINTS)
        assert np.all(np.isfinite(column)), name
        worst = max(distance(name, complex(column[row]), independent[row][name]) for row in range(N_POINTS))
        if not worst < TOLERANCE:
            wrong[name] = worst
    assert not wrong


@pytest.mark.parametrize(
    ("quantity", "parameter", "shift"),
    [
        ("branching_K_pi0_mu_nu", "isospin_breaking_K_pi", 1e-6),
        ("epsilon_K", "short_distance_factor_up_top", 1e-6),
        ("phase_phi_s", "penguin_shift_phi_s", 1e-4),
        ("branching_D_tau_nu", "long_distance_em_D", 1e-6),
    ],
)
def test_a_planted_error_is_seen(
    points: Mapping[str, np.ndarray],
    independent: list[dict[str, complex]],
    quantity: str,
    parameter: str,
    shift: float,
) -> None:
    moved = {**points, parameter: points[parameter] + shift}
    column = catalogue.compute([quantity], moved)[quantity]
    assert all(
        distance(quantity, complex(column[row]), independent[row][quantity]) > TOLERANCE
        for row in range(N_POINTS)
    )
