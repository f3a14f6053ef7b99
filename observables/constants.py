"""Masses, couplings and lifetimes of the particles that the predictions use.

Masses and couplings are constants: their uncertainties are far below those of any measurement of the mixing
matrix. Lifetimes are parameters, held at their start value unless an inputs file measures them, because their
uncertainties are not negligible (K_L: 0.41 %, D+: 0.5 %, D_s: 0.4 %).

Masses are in GeV, lifetimes in seconds; hbar = c = 1 except where `reduced_planck_constant` turns a width in
GeV into a rate in 1/s. A constant that carries a `pdg` identifier equals the value printed in the listings of
the Particle Data Group for that identifier, to the last printed digit.
"""

from __future__ import annotations

from observables.catalogue import constant, parameter

LISTINGS = "F. Takahashi et al. (Particle Data Group), Int. J. Mod. Phys. A 41, 2630011 (2026)"

# --- couplings and conversion -----------------------------------------------------------------------------

constant(
    "fermi_constant",
    1.1663788e-5,
    error=6.0e-12,
    unit="GeV^-2",
    title="Fermi constant",
    latex=r"G_F",
    source="Particle Data Group, review of physical constants (2024), from the muon lifetime; MuLan, "
    "Phys. Rev. D 87, 052003",
)
constant(
    "reduced_planck_constant",
    6.582119569e-25,
    error=0.0,
    unit="GeV s",
    title="Reduced Planck constant",
    latex=r"\hbar",
    source="SI (exact by definition, printed digits); CODATA 2022",
)
constant(
    "fine_structure_constant",
    1.0 / 137.035999177,
    error=1.1e-12,
    unit="1",
    title="Fine-structure constant at zero momentum transfer",
    latex=r"\alpha",
    source="CODATA 2022, 1/alpha = 137.035999177(21)",
)
constant(
    "strong_coupling_mZ",
    0.1180,
    error=0.0009,
    unit="1",
    title="Strong coupling at the Z mass, five flavours",
    latex=r"\alpha_s(m_Z)",
    source="Particle Data Group, review of quantum chromodynamics (2024); value from memory",
)

# --- masses -----------------------------------------------------------------------------------------------

_MASSES = (
    # name, value and error in GeV, PDG identifier, title, latex
    ("mass_W", 80.3625, 0.0077, "S043M", "W boson mass", r"m_W"),
    ("mass_Z", 91.1879, 0.0020, "S044M", "Z boson mass", r"m_Z"),
    ("mass_e", 0.51099895069e-3, 1.6e-13, "S003M", "Electron mass", r"m_e"),
    ("mass_mu", 0.1056583755, 2.3e-9, "S004M", "Muon mass", r"m_\mu"),
    ("mass_tau", 1.77693, 9.0e-5, "S035M", "Tau mass", r"m_\tau"),
    ("mass_pi", 0.13957039, 1.8e-7, "S008M", "Charged pion mass", r"m_{\pi^+}"),
    ("mass_pi0", 0.1349768, 5.0e-7, "S009M", "Neutral pion mass", r"m_{\pi^0}"),
    ("mass_K", 0.493677, 1.5e-5, "S010M", "Charged kaon mass", r"m_{K^+}"),
    ("mass_K0", 0.497611, 1.3e-5, "S011M", "Neutral kaon mass", r"m_{K^0}"),
    ("mass_D", 1.86966, 5.0e-5, "S031M", "D+ mass", r"m_{D^+}"),
    ("mass_D0", 1.86484, 4.0e-5, "S032M", "D0 mass", r"m_{D^0}"),
    ("mass_Ds", 1.96835, 7.0e-5, "S034M", "D_s+ mass", r"m_{D_s}"),
    ("mass_Bu", 5.27941, 7.0e-5, "S041M", "B+ mass", r"m_{B^+}"),
    ("mass_Bd", 5.27972, 8.0e-5, "S042M", "B0 mass", r"m_{B^0}"),
    ("mass_Bs", 5.36693, 1.0e-4, "S086M", "B_s mass", r"m_{B_s}"),
    ("mass_Bc", 6.27447, 3.2e-4, "S091M", "B_c+ mass", r"m_{B_c}"),
    ("mass_n", 0.9395654219, 5.0e-10, "S017M", "Neutron mass", r"m_n"),
    ("mass_p", 0.93827208943, 2.9e-10, "S016M", "Proton mass", r"m_p"),
)

for _name, _value, _error, _pdg, _title, _latex in _MASSES:
    constant(_name, _value, error=_error, unit="GeV", title=_title, latex=_latex, source=LISTINGS, pdg=_pdg)

# --- neutral kaons ----------------------------------------------------------------------------------------

constant(
    "mass_difference_K",
    # 0.5293(9)e10 hbar/s times hbar
    0.5293e10 * 6.582119569e-25,
    error=0.0009e10 * 6.582119569e-25,
    unit="GeV",
    title="Mass difference of K_L and K_S",
    latex=r"\Delta m_K",
    source=LISTINGS + ", fit assuming CPT",
    pdg="S013D",
)
constant(
    "phase_epsilon_K",
    43.52,
    error=0.04,
    unit="deg",
    title="Phase of epsilon_K",
    latex=r"\phi_\epsilon",
    source=LISTINGS + ", fit assuming CPT",
    pdg="S013EPH",
)

# --- lifetimes --------------------------------------------------------------------------------------------

_LIFETIMES = (
    # name, start and typical step in seconds, title, latex
    ("lifetime_tau", 2.903e-13, 5.0e-16, "Tau lifetime", r"\tau_\tau"),
    ("lifetime_pi", 2.6033e-8, 5.0e-12, "Charged pion lifetime", r"\tau_{\pi^+}"),
    ("lifetime_K", 1.2380e-8, 2.0e-11, "Charged kaon lifetime", r"\tau_{K^+}"),
    ("lifetime_KS", 8.954e-11, 4.0e-14, "K_S lifetime", r"\tau_{K_S}"),
    ("lifetime_KL", 5.116e-8, 2.1e-10, "K_L lifetime", r"\tau_{K_L}"),
    ("lifetime_D", 1.033e-12, 5.0e-15, "D+ lifetime", r"\tau_{D^+}"),
    ("lifetime_D0", 4.103e-13, 1.0e-15, "D0 lifetime", r"\tau_{D^0}"),
    ("lifetime_Ds", 5.012e-13, 2.2e-15, "D_s+ lifetime", r"\tau_{D_s}"),
    ("lifetime_Bu", 1.637e-12, 4.0e-15, "B+ lifetime", r"\tau_{B^+}"),
    ("lifetime_Bd", 1.5113e-12, 2.7e-15, "B0 lifetime", r"\tau_{B^0}"),
    ("lifetime_Bs", 1.515e-12, 6.0e-15, "B_s lifetime", r"\tau_{B_s}"),
    ("lifetime_Bc", 5.10e-13, 9.0e-15, "B_c+ lifetime", r"\tau_{B_c}"),
)

for _name, _value, _error, _title, _latex in _LIFETIMES:
    parameter(
        _name,
        unit="s",
        start=_value,
        lower=0.0,
        upper=10.0 * _value,
        scale=_error,
        title=_title,
        latex=_latex,
        source=LISTINGS,
        fixed=True,
    )
