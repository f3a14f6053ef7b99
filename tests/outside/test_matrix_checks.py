"""The mixing matrix against the published global fits: CKM reviews of the Particle Data Group.

Sources: A. Ceccucci, Z. Ligeti, Y. Sakai, "CKM Quark-Mixing Matrix", 2024 edition with the 2025 update
(Phys. Rev. D 110, 030001) and 2026 edition (Eqs. 12.26 to 12.28, frequentist). Older editions: second-hand
or from memory.

The published elements are medians or modes of the fit, the four parameters too, each rounded. So a published
value must lie in the range that its own rounding and the rounding of the four inputs allow.
"""

from __future__ import annotations

import itertools

import numpy as np
import pytest

from observables import catalogue

NAMES = ("wolfenstein_lambda", "wolfenstein_A", "wolfenstein_rhobar", "wolfenstein_etabar")

#: lambda, A, rho-bar, eta-bar, with half of their last digits
EDITIONS = {
    2026: ((0.22517, 0.826, 0.1576, 0.3556), (0.5e-5, 0.5e-3, 0.5e-4, 0.5e-4)),
    2025: ((0.22501, 0.826, 0.1591, 0.3523), (0.5e-5, 0.5e-3, 0.5e-4, 0.5e-4)),
    2022: ((0.22500, 0.826, 0.159, 0.348), (0.5e-5, 0.5e-3, 0.5e-3, 0.5e-3)),
    2020: ((0.22650, 0.790, 0.141, 0.357), (0.5e-5, 0.5e-3, 0.5e-3, 0.5e-3)),
}

#: quantity, factor to the published unit, published value, half of its last digit
PUBLISHED = {
    2026: [
        ("magnitude_V_ud", 1, 0.97431, 0.5e-5),
        ("magnitude_V_us", 1, 0.22517, 0.5e-5),
        ("magnitude_V_ub", 1, 0.003763, 0.5e-6),
        ("magnitude_V_cd", 1, 0.22503, 0.5e-5),
        ("magnitude_V_cs", 1, 0.97345, 0.5e-5),
        ("magnitude_V_cb", 1, 0.04189, 0.5e-5),
        ("magnitude_V_td", 1, 0.00863, 0.5e-5),
        ("magnitude_V_ts", 1, 0.04117, 0.5e-5),
        ("magnitude_V_tb", 1, 0.999115, 0.5e-6),
        ("sine_theta12", 1, 0.22517, 0.5e-5),
        ("sine_theta13", 1, 0.003763, 0.5e-6),
        ("sine_theta23", 1, 0.04189, 0.5e-5),
        ("kobayashi_maskawa_phase", np.pi / 180, 1.154, 0.5e-3),
        ("angle_beta_s", 2 * np.pi / 180, 0.03768, 0.5e-5),
        ("jarlskog", 1e5, 3.16, 0.5e-2),
    ],
    2025: [
        ("magnitude_V_ud", 1, 0.97435, 0.5e-5),
        ("magnitude_V_us", 1, 0.22501, 0.5e-5),
        ("magnitude_V_ub", 1, 0.003732, 0.5e-6),
        ("magnitude_V_cd", 1, 0.22487, 0.5e-5),
        ("magnitude_V_cs", 1, 0.97349, 0.5e-5),
        ("magnitude_V_cb", 1, 0.04183, 0.5e-5),
        ("magnitude_V_td", 1, 0.00858, 0.5e-5),
        ("magnitude_V_ts", 1, 0.04111, 0.5e-5),
        ("magnitude_V_tb", 1, 0.999118, 0.5e-6),
        ("jarlskog", 1e5, 3.12, 0.5e-2),
        ("kobayashi_maskawa_phase", np.pi / 180, 1.147, 0.5e-3),
    ],
    2022: [("jarlskog", 1e5, 3.08, 0.5e-2)],
    2020: [("jarlskog", 1e5, 3.00, 0.5e-2), ("kobayashi_maskawa_phase", np.pi / 180, 1.196, 0.5e-3)],
}

ROWS = [(edition, *row) for edition, rows in PUBLISHED.items() for row in rows]


@pytest.mark.parametrize(
    ("edition", "name", "factor", "published", "half"), ROWS, ids=[f"{row[0]}-{row[1]}" for row in ROWS]
)
def test_published_fit(edition, name, factor, published, half):
    centre, halves = EDITIONS[edition]
    corners = np.array(
        [
            np.array(centre) + np.array(signs) * np.array(halves)
            for signs in itertools.product((-1, 0, 1), repeat=4)
        ]
    )
    found = factor * catalogue.compute((name,), dict(zip(NAMES, corners.T, strict=True)))[name]
    assert found.min() - half <= published <= found.max() + half
    # and the ranges are narrow enough to mean something
    assert found.max() - found.min() < 0.02 * abs(published)


@pytest.mark.parametrize(
    ("edition", "alpha", "beta", "gamma"), [(2025, 91.57, 22.73, 65.70), (2026, 91.03, 22.88, 66.08)]
)
def test_angles_of_the_published_apex(edition, alpha, beta, gamma):
    """Plane geometry of the published apex: arctan(eta/rho) and arctan(eta/(1 - rho)); digits of the apex."""
    point = dict(zip(NAMES, EDITIONS[edition][0], strict=True))
    found = catalogue.compute(("angle_alpha", "angle_beta", "angle_gamma"), point)
    rho, eta = EDITIONS[edition][0][2:]
    assert found["angle_gamma"] == pytest.approx(np.degrees(np.arctan2(eta, rho)), abs=1e-9)
    assert found["angle_beta"] == pytest.approx(np.degrees(np.arctan2(eta, 1 - rho)), abs=1e-9)
    # half a last digit in rho-bar and eta-bar moves gamma by 0.011 degrees
    assert list(found.values()) == pytest.approx([alpha, beta, gamma], abs=0.02)


def test_common_practice_couplings():
    """Common practice, no source: the u-d coupling is almost five times the u-s coupling."""
    found = catalogue.compute(
        ("magnitude_ratio_V_us_V_ud",), dict(zip(NAMES, EDITIONS[2026][0], strict=True))
    )
    assert 4.0 < 1.0 / found["magnitude_ratio_V_us_V_ud"] < 5.0
