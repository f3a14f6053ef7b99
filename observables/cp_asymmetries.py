r"""CP asymmetries and the phases they measure.

All of them start from the mixing phases of `observables.neutral_mixing`, so that a hypothesis on mixing moves
everything it must. Sign conventions: ``S = 2 Im(lambda_f) / (1 + |lambda_f|^2)`` with
``lambda_f = (q/p)(Abar_f/A_f)``, and the time-dependent asymmetry is
``(Gamma(Bbar) - Gamma(B)) / sum = S sin(dm t) - C cos(dm t)``.

Sources
-------
PDG review "CP Violation in the Quark Sector" (T. Gershon, Y. Nir); HFLAV, arXiv:2206.07501.
"""

from __future__ import annotations

import math

import numpy as np

from observables.catalogue import Real, parameter, quantity

_GERSHON_NIR = "PDG review CP Violation in the Quark Sector (T. Gershon, Y. Nir)"

RADIAN_PER_DEGREE = math.pi / 180

parameter(
    "penguin_shift_2beta",
    unit="deg",
    start=0.0,
    lower=-30.0,
    upper=30.0,
    scale=0.7,
    title="Shift of the phase measured in b -> c cbar s decays of B_d by penguin amplitudes",
    latex=r"\Delta\phi_d",
    source="size: P. Frings, U. Nierste, M. Wiebusch, Phys. Rev. Lett. 115, 061802 (arXiv:1503.00859)",
    cp_odd=True,
    fixed=True,
)
parameter(
    "penguin_shift_phi_s",
    unit="deg",
    start=0.0,
    lower=-30.0,
    upper=30.0,
    scale=1.0,
    title="Shift of the phase measured in b -> c cbar s decays of B_s by penguin amplitudes",
    latex=r"\Delta\phi_s",
    source="size: P. Frings, U. Nierste, M. Wiebusch, Phys. Rev. Lett. 115, 061802 (arXiv:1503.00859)",
    cp_odd=True,
    fixed=True,
)


@quantity(
    unit="1",
    title="Sine of the B_d mixing phase in b -> c cbar s decays",
    latex=r"\sin 2\beta",
    source=_GERSHON_NIR,
    cp="odd",
)
def sine_2beta_ccs(mixing_phase_Bd: Real, penguin_shift_2beta: Real) -> Real:
    """``sin(phi_d + penguin shift)``, dimensionless; CP-odd.

    Sign: ``+S`` of J/psi K_S, ``-S`` of J/psi K_L; positive in the standard model (``sin 2 beta``). The phase
    of kaon mixing, ``2 beta_K`` of less than 0.1 deg, is neglected.
    """
    return np.sin((mixing_phase_Bd + penguin_shift_2beta) * RADIAN_PER_DEGREE)


@quantity(
    unit="1",
    title="Cosine of the B_d mixing phase in b -> c cbar s decays",
    latex=r"\cos 2\beta",
    source=_GERSHON_NIR,
)
def cosine_2beta_ccs(mixing_phase_Bd: Real, penguin_shift_2beta: Real) -> Real:
    """``cos(phi_d + penguin shift)``, dimensionless; CP-even, positive in the standard model."""
    return np.cos((mixing_phase_Bd + penguin_shift_2beta) * RADIAN_PER_DEGREE)


@quantity(
    unit="rad",
    title="Phase measured in b -> c cbar s decays of B_s",
    latex=r"\phi_s",
    source=_GERSHON_NIR,
    cp="odd",
    period=2 * math.pi,
)
def phase_phi_s(mixing_phase_Bs: Real, penguin_shift_phi_s: Real) -> Real:
    """B_s mixing phase plus penguin shift, in rad (the shift itself is in deg); CP-odd.

    Sign: ``-2 beta_s`` in the standard model, about -0.037; ``S = -eta_f sin(phi_s)`` for a final state of CP
    parity eta_f.
    """
    return (mixing_phase_Bs + penguin_shift_phi_s) * RADIAN_PER_DEGREE


@quantity(
    unit="1",
    title="Sine of the sum of the B_d mixing phase and gamma",
    latex=r"\sin(2\beta + \gamma)",
    source=_GERSHON_NIR,
    cp="odd",
)
def sine_2beta_plus_gamma(mixing_phase_Bd: Real, angle_gamma: Real) -> Real:
    """``sin(phi_d + gamma)`` as measured in B_d -> D(*) pi, dimensionless; CP-odd.

    Sign: positive in the standard model, ``sin(2 beta + gamma)`` with an argument near 110 deg.
    Tree decays: the mixing phase enters without any penguin shift.
    """
    return np.sin((mixing_phase_Bd + angle_gamma) * RADIAN_PER_DEGREE)


@quantity(
    unit="deg",
    title="Angle alpha as isospin analyses of B -> pi pi, rho pi, rho rho measure it",
    latex=r"\alpha_{\mathrm{isospin}}",
    source="M. Gronau, D. London, Phys. Rev. Lett. 65, 3381 (1990)",
    cp="odd",
    period=180.0,
)
def isospin_alpha(mixing_phase_Bd: Real, angle_gamma: Real) -> Real:
    """``180 deg - gamma - phi_d/2`` modulo 180 deg, given in [0, 180); CP-odd.

    The CP operation exchanges alpha and 180 deg - alpha, which is -alpha. The decays fix the sum of gamma
    (from the tree amplitudes) and half the mixing phase, modulo 180 deg: the angle alpha of the unitarity
    triangle in the standard model, shifted by minus half the new phase if mixing has one. Electroweak
    penguins (about 1.5 deg) are neglected.
    """
    alpha = 180.0 - angle_gamma - 0.5 * mixing_phase_Bd
    for _ in range(2):  # gamma and phi_d lie in [-180, 180], so alpha starts in [-90, 450]
        alpha = np.where(alpha < 0.0, alpha + 180.0, np.where(alpha >= 180.0, alpha - 180.0, alpha))
    return alpha
