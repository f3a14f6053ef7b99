"""A second, deliberately plain calculation of every catalogue quantity, for comparison only.

Scalar arithmetic in mpmath with 30 digits, in the textbook form of every formula, one point at a time. Nothing
here imports a formula of the `observables` package: the only things taken from it are the numerical values of
parameters and constants, which arrive in a dictionary. Sources are those of the formulas, not of the code:

- standard parametrisation, exact generalised Wolfenstein parameters, definitions of the angles: A. Ceccucci,
  Z. Ligeti, Y. Sakai, "CKM Quark-Mixing Matrix", Phys. Rev. D 110, 030001; A. Buras, M. Lautenbacher, G. Ostermaier,
  Phys. Rev. D 50, 3433;
- box functions: T. Inami, C. S. Lim, Prog. Theor. Phys. 65, 297; G. Buchalla, A. Buras, M. Lautenbacher,
  Rev. Mod. Phys. 68, 1125, Eqs. (XII.4), (XVIII.5) for the way they enter;
- epsilon_K in the up-top form: J. Brod, M. Gorbahn, E. Stamou, Phys. Rev. Lett. 125, 171803;
- K -> pi l nu: H. Leutwyler, M. Roos, Z. Phys. C 25, 91; dispersive form factors: V. Bernard, M. Oertel,
  E. Passemar, J. Stern, Phys. Lett. B 638, 480;
- superallowed beta decay: J. C. Hardy, I. S. Towner, Phys. Rev. C 102, 045501;
- leptonic widths: W. Marciano, A. Sirlin, Phys. Rev. Lett. 71, 3629; short-distance factor: A. Sirlin,
  Nucl. Phys. B 196, 83;
- running coupling: T. van Ritbergen, J. Vermaseren, S. Larin, Phys. Lett. B 400, 379; decoupling: K. Chetyrkin,
  B. Kniehl, M. Steinhauser, Phys. Rev. Lett. 79, 2184; pole mass: K. Melnikov, T. van Ritbergen, Phys. Lett. B
  482, 99 (the rounded three-loop coefficients are part of what is compared).
"""

from __future__ import annotations

from collections.abc import Mapping
from typing import Any

from mpmath import mp, mpc, mpf

Number = Any
DIGITS = 30


def box_function(x: Number) -> Number:
    """S_0(x) of one quark in both legs of the box."""
    one = mpf(1)
    return (4 * x - 11 * x**2 + x**3) / (4 * (one - x) ** 2) - 3 * x**3 * mp.log(x) / (2 * (one - x) ** 3)


def box_function_mixed(x: Number, y: Number) -> Number:
    """S_0(x, y) of two different quarks in the box."""

    def f(a: Number) -> Number:
        return mpf(1) / 4 + mpf(3) / (2 * (1 - a)) - mpf(3) / (4 * (1 - a) ** 2)

    first = mp.log(x) / (x - y) * f(x)
    second = mp.log(y) / (y - x) * f(y)
    return x * y * (first + second - mpf(3) / (4 * (1 - x) * (1 - y)))


def running_coupling(scale: Number, coupling: Number, reference_scale: Number, flavours: int) -> Number:
    """Four-loop alpha_s at another scale: the root of ln(mu^2/mu_0^2) = -int da/beta(a), a = alpha_s/pi."""
    n, zeta3 = mpf(flavours), mp.zeta(3)
    beta = (
        (11 - 2 * n / 3) / 4,
        (102 - 38 * n / 3) / 16,
        (mpf(2857) / 2 - 5033 * n / 18 + 325 * n**2 / 54) / 64,
        (
            mpf(149753) / 6
            + 3564 * zeta3
            - (mpf(1078361) / 162 + 6508 * zeta3 / 27) * n
            + (mpf(50065) / 162 + 6472 * zeta3 / 81) * n**2
            + 1093 * n**3 / 729
        )
        / 256,
    )
    start, distance = coupling / mp.pi, 2 * mp.log(scale / reference_scale)

    def beta_function(a: Number) -> Number:
        return sum(b * a ** (k + 2) for k, b in enumerate(beta))

    def travelled(a: Number) -> Number:
        return mp.quad(lambda s: 1 / beta_function(s), [a, start]) - distance

    return mp.pi * mp.findroot(travelled, start / (1 + beta[0] * start * distance))


def top_pole_mass(mass: Number, coupling_z: Number, mass_z: Number) -> Number:
    """Three-loop pole mass of the top quark from m_t(m_t)."""
    with mp.workdps(20):
        five = running_coupling(mass, coupling_z, mass_z, 5)
        zeta2, zeta3 = mp.zeta(2), mp.zeta(3)
        third = mpf(564731) / 124416 - 82043 * zeta3 / 27648 - mpf(2633) * 5 / 31104

        def decoupled(six: Number) -> Number:
            a = six / mp.pi
            return six * (1 + mpf(11) / 72 * a**2 + third * a**3) - five

        a = mp.findroot(decoupled, five) / mp.pi
        second = mpf(307) / 32 + 2 * zeta2 + 2 * zeta2 * mp.log(2) / 3 - zeta3 / 6
        second -= 5 * (mpf(71) / 144 + zeta2 / 3)
        third = mpf("190.595") - 5 * mpf("26.655") + 25 * mpf("0.6527")
        return mass * (1 + mpf(4) / 3 * a + second * a**2 + third * a**3)


def wolfenstein_matrix(lam: Number, a: Number, rhobar: Number, etabar: Number) -> dict[str, Number]:
    """The nine elements from the three angles and the phase of the standard parametrisation."""
    apex = mpc(rhobar, etabar)
    s12, s23 = lam, a * lam**2
    s13_phase = (
        a * lam**3 * apex * mp.sqrt(1 - a**2 * lam**4)
        / (mp.sqrt(1 - lam**2) * (1 - a**2 * lam**4 * apex))
    )  # fmt: skip
    s13, delta = abs(s13_phase), mp.arg(s13_phase)
    c12, c23, c13 = mp.sqrt(1 - s12**2), mp.sqrt(1 - s23**2), mp.sqrt(1 - s13**2)
    phase = mp.expj(delta)
    return {
        "ud": mpc(c12 * c13),
        "us": mpc(s12 * c13),
        "ub": s13 / phase,
        "cd": -s12 * c23 - c12 * s23 * s13 * phase,
        "cs": c12 * c23 - s12 * s23 * s13 * phase,
        "cb": mpc(s23 * c13),
        "td": s12 * s23 - c12 * c23 * s13 * phase,
        "ts": -c12 * s23 - s12 * c23 * s13 * phase,
        "tb": mpc(c23 * c13),
        "delta": delta,
    }


def degrees(angle: Number) -> Number:
    return angle * 180 / mp.pi


def leptonic_width(fermi: Number, meson: Number, lepton: Number) -> Number:
    """Width of P -> l nu for f_P |V| = 1 GeV, in the normalisation f_pi = 130 MeV."""
    return fermi**2 / (8 * mp.pi) * meson * lepton**2 * (1 - lepton**2 / meson**2) ** 2


def tau_width(fermi: Number, tau: Number, meson: Number) -> Number:
    """Width of tau -> P nu for f_P |V| = 1 GeV."""
    return fermi**2 / (16 * mp.pi) * tau**3 * (1 - meson**2 / tau**2) ** 2


def kaon_phase_space(
    kaon: Number, pion: Number, lepton: Number, vector: Any, scalar: Any, digits: int = 16
) -> Number:
    """The integral I_Kl of K -> pi l nu, over ln t so that the electron threshold is resolved."""
    difference = kaon**2 - pion**2

    def integrand(s: Number) -> Number:
        t = mp.exp(s)
        kallen = (t - (kaon + pion) ** 2) * (t - (kaon - pion) ** 2)
        if kallen <= 0:
            return mpf(0)
        bracket = vector(t) ** 2
        bracket += 3 * lepton**2 * difference**2 / ((2 * t + lepton**2) * kallen) * scalar(t) ** 2
        weight = kallen ** mpf(1.5) * (1 + lepton**2 / (2 * t)) * (1 - lepton**2 / t) ** 2
        return t * weight * bracket / kaon**8

    with mp.workdps(digits):
        return mp.quad(integrand, [mp.log(lepton**2), mp.log((kaon - pion) ** 2)])


def all_quantities(values: Mapping[str, float]) -> dict[str, Number]:
    """Every quantity that this module knows, at one point.

    Parameters
    ----------
    values : mapping
        Parameter and constant names with their numerical values in catalogue units.

    Returns
    -------
    dict
        Quantity name -> mpf or mpc, in the catalogue's units.
    """
    with mp.workdps(DIGITS):
        p = {name: mpf(float(value)) for name, value in values.items()}
        out: dict[str, Number] = {}
        out.update(_matrix(p))
        out.update(_decays(p, out))
        out.update(_kaon_semileptonic(p, out))
        out.update(_mixing(p, out))
        return out


def _matrix(p: dict[str, Number]) -> dict[str, Number]:
    v = wolfenstein_matrix(
        p["wolfenstein_lambda"], p["wolfenstein_A"], p["wolfenstein_rhobar"], p["wolfenstein_etabar"]
    )
    delta = v.pop("delta")
    lam, a = p["wolfenstein_lambda"], p["wolfenstein_A"]
    out: dict[str, Number] = {f"V_{name}": element for name, element in v.items()}
    m = {name: abs(element) for name, element in v.items()}
    out.update({f"magnitude_V_{name}": element for name, element in m.items()})
    for up in "uct":
        out[f"unitarity_sum_row_{up}"] = sum(m[up + down] ** 2 for down in "dsb")
    for down in "dsb":
        out[f"unitarity_sum_column_{down}"] = sum(m[up + down] ** 2 for up in "uct")
    for upper, lower in (("us", "ud"), ("ub", "cb"), ("td", "ts")):
        out[f"magnitude_ratio_V_{upper}_V_{lower}"] = m[upper] / m[lower]

    def c(name: str) -> Number:
        return mp.conj(v[name])

    out["angle_alpha"] = degrees(mp.arg(-v["td"] * c("tb") / (v["ud"] * c("ub"))))
    out["angle_beta"] = degrees(mp.arg(-v["cd"] * c("cb") / (v["td"] * c("tb"))))
    out["angle_gamma"] = degrees(mp.arg(-v["ud"] * c("ub") / (v["cd"] * c("cb"))))
    out["angle_beta_s"] = degrees(mp.arg(-v["ts"] * c("tb") / (v["cs"] * c("cb"))))
    out["angle_beta_K"] = degrees(mp.arg(-v["cs"] * c("cd") / (v["us"] * c("ud"))))
    s12, s23, s13 = lam, a * lam**2, m["ub"]
    c12, c23, c13 = mp.sqrt(1 - s12**2), mp.sqrt(1 - s23**2), mp.sqrt(1 - s13**2)
    out["jarlskog"] = c12 * c23 * c13**2 * s12 * s23 * s13 * mp.sin(delta)
    out["side_Rb"] = mp.hypot(p["wolfenstein_rhobar"], p["wolfenstein_etabar"])
    out["side_Rt"] = mp.hypot(1 - p["wolfenstein_rhobar"], p["wolfenstein_etabar"])
    out["sine_theta12"], out["sine_theta23"], out["sine_theta13"] = s12, s23, s13
    out["kobayashi_maskawa_phase"] = degrees(delta)
    out["parametrised_sine_23"], out["parametrised_sine_13_with_phase"] = s23, s13 * mp.expj(delta)
    for pair, cosine in (("12", c12), ("23", c23), ("13", c13)):
        out[f"parametrised_cosine_{pair}"] = cosine
    return out


def _decays(p: dict[str, Number], q: dict[str, Number]) -> dict[str, Number]:
    fermi, hbar = p["fermi_constant"], p["reduced_planck_constant"]
    mass = {name[5:]: value for name, value in p.items() if name.startswith("mass_")}
    m = {name[12:]: value for name, value in q.items() if name.startswith("magnitude_V_")}
    out: dict[str, Number] = {}

    constant_k = 2 * mp.pi**3 * hbar * mp.log(2) / mass["e"] ** 5
    out["superallowed_scale"] = constant_k / (2 * fermi**2)
    out["superallowed_Ft"] = constant_k / (
        2 * fermi**2 * m["ud"] ** 2 * (1 + p["inner_radiative_correction"])
    )

    def rate(meson: str, lepton: str) -> Number:
        value = leptonic_width(fermi, mass[meson], mass[lepton]) / hbar
        out[f"rate_unit_{meson}_{lepton}_nu"] = value
        return value

    f_pi, f_k = p["decay_constant_pi"], p["decay_constant_K"]
    out["width_pi_mu_nu"] = rate("pi", "mu") * f_pi**2 * m["ud"] ** 2 * (1 + p["radiative_pi_mu_nu"])
    out["width_K_mu_nu"] = rate("K", "mu") * f_k**2 * m["us"] ** 2 * (1 + p["radiative_K_mu_nu"])
    out["ratio_K_pi_mu_nu"] = (
        rate("K", "mu") / rate("pi", "mu")
        * (p["decay_constant_ratio_K_pi"] * m["us"] / m["ud"]) ** 2
        * (1 + p["radiative_K_pi_mu_nu"])
    )  # fmt: skip
    for meson in ("pi", "K"):
        big, electron, muon = mass[meson], mass["e"], mass["mu"]
        born = (electron / muon) ** 2 * ((big**2 - electron**2) / (big**2 - muon**2)) ** 2
        out[f"ratio_e_mu_{meson}"] = born * (1 + p[f"radiative_e_mu_{meson}"])

    for meson, f, element in (("pi", f_pi, "ud"), ("K", f_k, "us")):
        width = tau_width(fermi, mass["tau"], mass[meson])
        out[f"rate_unit_tau_{meson}_nu"] = width / hbar
        width *= (
            f**2
            * m[element] ** 2
            * p["short_distance_factor_semileptonic"]
            * (1 + p[f"radiative_tau_{meson}_nu"])
        )
        out[f"branching_tau_{meson}_nu"] = p["lifetime_tau"] * width / hbar

    # amplitude factor of Sirlin, at the D mass for both charm mesons
    electroweak = 1 + p["fine_structure_constant"] / mp.pi * mp.log(mass["Z"] / mass["D"])
    shift = p["long_distance_em_D"]  # of a semileptonic amplitude; 0.7 of it for a leptonic one
    out["electroweak_factor_charm"] = electroweak
    out["long_distance_factor_D_leptonic"] = 1 + mpf(7) / 10 * shift
    out["amplitude_factor_D_semileptonic"] = electroweak * (1 + shift)
    for meson, element in (("D", "cd"), ("Ds", "cs")):
        for lepton in ("mu", "tau"):
            amplitude = electroweak * p[f"decay_constant_{meson}"] * m[element]
            amplitude *= 1 + mpf(7) / 10 * shift
            out[f"branching_{meson}_{lepton}_nu"] = (
                p[f"lifetime_{meson}"] * rate(meson, lepton) * amplitude**2
            )
    for final, element in (("K", "cs"), ("pi", "cd")):
        out[f"product_D_{final}"] = electroweak * (1 + shift) * p[f"form_factor_D_{final}"] * m[element]

    for meson, lepton, f, element in (
        ("Bu", "mu", "B", "ub"),
        ("Bu", "tau", "B", "ub"),
        ("Bc", "tau", "Bc", "cb"),
    ):
        amplitude = p[f"decay_constant_{f}"] * m[element]
        out[f"branching_{meson}_{lepton}_nu"] = p[f"lifetime_{meson}"] * rate(meson, lepton) * amplitude**2
    return out


def _kaon_semileptonic(p: dict[str, Number], q: dict[str, Number]) -> dict[str, Number]:
    out: dict[str, Number] = {}
    pion2 = p["mass_pi"] ** 2
    # The Callan-Treiman point is that of the K0 -> pi- form factor for both charge states.
    slope0 = pion2 / (p["mass_K0"] ** 2 - pion2) * (p["form_factor_log_C_K_pi"] - p["dispersive_G0_K_pi"])
    out["form_factor_scalar_slope_K_pi"] = slope0

    def series(slope: Number, p2: Number, p3: Number) -> Any:
        def form_factor(t: Number) -> Number:
            x = t / pion2
            return 1 + slope * x + (slope**2 + p2) * x**2 / 2 + (slope**3 + 3 * p2 * slope + p3) * x**3 / 6

        return form_factor

    dispersive = (
        series(p["form_factor_slope_K_pi"], p["dispersive_p2_vector_K_pi"], p["dispersive_p3_vector_K_pi"]),
        series(slope0, p["dispersive_p2_scalar_K_pi"], p["dispersive_p3_scalar_K_pi"]),
    )

    def quadratic_vector(t: Number) -> Number:
        x = t / pion2
        return 1 + p["form_factor_linear_K_pi"] * x + p["form_factor_curvature_K_pi"] * x**2 / 2

    def linear_scalar(t: Number) -> Number:
        return 1 + p["form_factor_scalar_linear_K_pi"] * t / pion2

    product = p["form_factor_K_pi"] * q["magnitude_V_us"]
    out["product_K_pi"] = product
    fermi, hbar = p["fermi_constant"], p["reduced_planck_constant"]
    rate = fermi**2 / (192 * mp.pi**3) / hbar
    out["rate_unit_K0_pi_l_nu"], out["rate_unit_K_pi0_l_nu"] = (
        rate * p["mass_K0"] ** 5,
        rate * p["mass_K"] ** 5 / 2,
    )
    for lepton in ("e", "mu"):
        for suffix, (vector, scalar) in (
            ("", dispersive),
            ("_quadratic", (quadratic_vector, linear_scalar)),
        ):
            neutral = kaon_phase_space(p["mass_K0"], p["mass_pi"], p[f"mass_{lepton}"], vector, scalar)
            charged = kaon_phase_space(p["mass_K"], p["mass_pi0"], p[f"mass_{lepton}"], vector, scalar)
            out[f"phase_space_K0_pi_{lepton}_nu{suffix}"] = neutral
            out[f"phase_space_K_pi0_{lepton}_nu{suffix}"] = charged
            common = rate * product**2
            common *= p["short_distance_factor_semileptonic"]
            width0 = common * p["mass_K0"] ** 5 * neutral * (1 + p[f"radiative_K0_pi_{lepton}_nu"])
            out[f"branching_KL_pi_{lepton}_nu{suffix}"] = width0 * p["lifetime_KL"]
            out[f"branching_KS_pi_{lepton}_nu{suffix}"] = width0 * p["lifetime_KS"]
            corrections = 1 + p[f"radiative_K_pi0_{lepton}_nu"] + 2 * p["isospin_breaking_K_pi"]
            width = common * p["mass_K"] ** 5 * charged * corrections / 2
            out[f"branching_K_pi0_{lepton}_nu{suffix}"] = width * p["lifetime_K"]
    return out


def _mixing(p: dict[str, Number], q: dict[str, Number]) -> dict[str, Number]:
    out: dict[str, Number] = {}
    v = {name[2:]: value for name, value in q.items() if name.startswith("V_")}
    hbar_ps = p["reduced_planck_constant"] * mpf(10) ** 12
    x_t, x_c = (p["top_mass_msbar"] / p["mass_W"]) ** 2, (p["charm_mass_msbar"] / p["mass_W"]) ** 2
    s_t, s_c, s_ct = box_function(x_t), box_function(x_c), box_function_mixed(x_c, x_t)
    out["box_function_top"], out["box_function_charm"], out["box_function_charm_top"] = s_t, s_c, s_ct
    prefactor = (p["fermi_constant"] * p["mass_W"]) ** 2 / (12 * mp.pi**2)
    out["mixing_prefactor"] = prefactor
    out["top_mass_pole"] = top_pole_mass(p["top_mass_msbar"], p["strong_coupling_mZ"], p["mass_Z"])

    element_s = p["mixing_matrix_element_Bs"]
    out["mixing_matrix_element_Bd"] = element_s / p["mixing_matrix_element_ratio"]
    for meson, down, element in (
        ("Bd", "d", element_s / p["mixing_matrix_element_ratio"]),
        ("Bs", "s", element_s),
    ):
        strength = prefactor * p[f"mass_{meson}"] * element**2 * p["short_distance_factor_B"] * s_t
        out[f"box_strength_{meson}"] = strength
        # ratio of the top to the charm product: its phase is the mixing phase in the frame of real V_cb V_cq*
        charm = v["cb"] * mp.conj(v["c" + down])
        rotated = v["tb"] * mp.conj(v["t" + down]) * mp.conj(charm) / abs(charm)
        amplitude = strength * rotated**2
        out[f"box_amplitude_{meson}"] = out[f"M12_{meson}"] = amplitude
        out[f"mixing_frequency_{meson}"] = 2 * abs(amplitude) / hbar_ps
        out[f"mixing_phase_{meson}"] = degrees(mp.arg(amplitude))

    # kaons, with lambda_u made real
    up, charm, top = (v[quark + "d"] * mp.conj(v[quark + "s"]) for quark in "uct")
    frame = abs(up) / up
    up, charm, top = abs(up), charm * frame, top * frame
    strength = prefactor * p["mass_K0"] * p["decay_constant_K"] ** 2 * p["bag_K"]
    out["kaon_product_up"], out["kaon_product_charm"], out["kaon_product_top"] = up, charm, top
    out["mixing_strength_K"] = strength
    s_tt, s_ut = s_t + s_c - 2 * s_ct, s_c - s_ct
    m12_top = strength * p["short_distance_factor_top_top"] * s_tt * mp.conj(top) ** 2
    m12_up_top = 2 * strength * p["short_distance_factor_up_top"] * s_ut * up * mp.conj(top)
    out["M12_K_top"], out["M12_K_up_top"], out["M12_K"] = m12_top, m12_up_top, m12_top + m12_up_top
    m12_charm_form = strength * (
        mp.conj(charm) ** 2 * p["short_distance_factor_charm_charm"] * s_c
        + mp.conj(top) ** 2 * p["short_distance_factor_top_top_charm_form"] * s_t
        + 2 * mp.conj(charm) * mp.conj(top) * p["short_distance_factor_charm_top"] * s_ct
    )
    out["M12_K_charm_top"] = m12_charm_form
    scale = p["long_distance_factor_epsilon_K"] / (mp.sqrt(2) * p["mass_difference_K"])
    out["epsilon_K"] = scale * mp.im(m12_top + m12_up_top)
    out["epsilon_K_charm_top"] = scale * mp.im(m12_charm_form)

    # phases, from the angles and not from M12
    beta, beta_s, gamma = (q[f"angle_{name}"] * mp.pi / 180 for name in ("beta", "beta_s", "gamma"))
    shift_d, shift_s = p["penguin_shift_2beta"] * mp.pi / 180, p["penguin_shift_phi_s"] * mp.pi / 180
    out["sine_2beta_ccs"] = mp.sin(2 * beta + shift_d)
    out["cosine_2beta_ccs"] = mp.cos(2 * beta + shift_d)
    out["phase_phi_s"] = -2 * beta_s + shift_s
    out["sine_2beta_plus_gamma"] = mp.sin(2 * beta + gamma)
    out["isospin_alpha"] = degrees(mp.pi - gamma - beta)
    return out
