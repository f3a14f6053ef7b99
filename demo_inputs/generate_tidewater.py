"""Write the invented Tidewater data: `tidewater.toml` and `tidewater_truth.json`.

Everything here is invented: the Saltmarsh ring, its three detectors Curlew, Dunlin and Plover, the Tidewater
combination, the Saltmarsh lattice group, and a world whose quarks mix differently from ours. Each measured
value is the prediction for the stated truth plus a random deviation drawn from its own stated error, so a fit
of the file must find the truth again. One measurement is spoilt on purpose: Plover sees far too many
B+ -> tau nu decays. The seed was chosen among a dozen so that no other measurement stands out by chance.

Run `python demo_inputs/generate_tidewater.py [FOLDER]`; the same files come out each time.
"""

from __future__ import annotations

import json
import math
import sys
from collections.abc import Sequence
from dataclasses import dataclass
from pathlib import Path

import numpy as np

from likelihoods import units
from observables import catalogue

SEED = 2603

TRUTH = {
    "wolfenstein_lambda": 0.2310,
    "wolfenstein_A": 0.790,
    "wolfenstein_rhobar": 0.200,
    "wolfenstein_etabar": 0.300,
    # decay constants and matrix elements, GeV
    "decay_constant_K": 0.1630,
    "decay_constant_ratio_K_pi": 1.2300,
    "decay_constant_D": 0.2230,
    "decay_constant_Ds": 0.2610,
    "decay_constant_B": 0.1990,
    "mixing_matrix_element_Bs": 0.2740,
    "mixing_matrix_element_ratio": 1.2600,
    "bag_K": 0.8100,
    # form factors and their shapes
    "form_factor_K_pi": 0.9560,
    "form_factor_D_K": 0.7700,
    "form_factor_D_pi": 0.6700,
    "form_factor_slope_K_pi": 0.0271,
    "form_factor_log_C_K_pi": 0.2250,
    # corrections
    "inner_radiative_correction": 0.0262,
    "short_distance_factor_semileptonic": 1.0240,
    "radiative_K0_pi_e_nu": 0.0131,
    "radiative_K0_pi_mu_nu": 0.0170,
    "radiative_K_pi0_e_nu": 0.0036,
    "radiative_K_pi0_mu_nu": 0.0019,
    "isospin_breaking_K_pi": 0.0285,
    "radiative_K_pi_mu_nu": -0.0120,
    "radiative_tau_K_nu": 0.0120,
    "long_distance_em_D": 0.0220,
    "short_distance_factor_B": 0.5600,
    "short_distance_factor_top_top": 0.6100,
    "short_distance_factor_up_top": 0.4160,
    "long_distance_factor_epsilon_K": 0.8900,
    # quark masses, GeV
    "top_mass_msbar": 168.0,
    "charm_mass_msbar": 1.310,
    # lifetimes, s
    "lifetime_KL": 5.30e-8,
    "lifetime_KS": 9.20e-11,
    "lifetime_K": 1.280e-8,
    "lifetime_tau": 3.000e-13,
    "lifetime_D": 1.070e-12,
    "lifetime_Ds": 5.200e-13,
    "lifetime_Bu": 1.700e-12,
}
DERIVED = (
    *(f"magnitude_V_{row}{column}" for row in "uct" for column in "dsb"),
    "angle_alpha",
    "angle_beta",
    "angle_gamma",
    "angle_beta_s",
    "jarlskog",
)

SOURCES = {
    "curlew": "invented: Curlew detector at the Saltmarsh ring",
    "dunlin": "invented: Dunlin detector at the Saltmarsh ring",
    "plover": "invented: Plover detector at the Saltmarsh ring",
    "tidewater": "invented: Tidewater combination of Curlew, Dunlin and Plover",
    "lattice": "invented: Saltmarsh lattice group",
    "theory": "invented: Saltmarsh theory group",
}


@dataclass(frozen=True)
class Item:
    """One entry to be measured; errors are in `unit`."""

    id: str
    quantity: str
    unit: str
    error: float | tuple[float, float] | dict[str, float]
    groups: str
    note: str = ""
    spoilt_by: float = 0.0  # deviation, in standard deviations, added to the random one


@dataclass(frozen=True)
class Block:
    """Entries of one publication with their correlation matrix."""

    id: str
    items: tuple[Item, ...]
    correlation: tuple[tuple[float, ...], ...]
    groups: str
    note: str = ""


@dataclass(frozen=True)
class Link:
    """Correlation between two single entries."""

    between: tuple[str, str]
    coefficient: float
    note: str


def split(statistical: float, **shared: float) -> dict[str, float]:
    """Error in named sources; those that publications share are named after the ring."""
    return {"statistical": statistical} | {
        f"saltmarsh-{name.replace('_', '-')}": error for name, error in shared.items()
    }


KAON = "magnitude tree kaon"
CHARM = "magnitude tree charm"
BEAUTY = "magnitude tree beauty"
ASYMMETRY = "cp-asymmetry loop beauty"
OSCILLATION = "oscillation loop beauty"

EXPERIMENT: tuple[Item | Block, ...] = (
    Item("curlew-superallowed-Ft", "superallowed_Ft", "s", 2.1, "magnitude tree"),
    Block(
        "curlew-KL",
        (
            Item("curlew-KL-pi-e-nu", "branching_KL_pi_e_nu", "%", 0.21, KAON),
            Item("curlew-KL-pi-mu-nu", "branching_KL_pi_mu_nu", "%", 0.16, KAON),
        ),
        ((1.0, -0.32), (-0.32, 1.0)),
        KAON,
        "one fit of both fractions",
    ),
    Item("dunlin-KS-pi-e-nu", "branching_KS_pi_e_nu", "1e-4", 0.07, KAON),
    Item("dunlin-K-pi0-e-nu", "branching_K_pi0_e_nu", "%", split(0.03, kaon_flux=0.04), KAON),
    Item("dunlin-K-pi0-mu-nu", "branching_K_pi0_mu_nu", "%", split(0.03, kaon_flux=0.027), KAON),
    Item("dunlin-ratio-K-pi-mu-nu", "ratio_K_pi_mu_nu", "1", 0.0041, KAON),
    Item("plover-tau-K-nu", "branching_tau_K_nu", "%", 0.011, KAON),
    Item("plover-D-mu-nu", "branching_D_mu_nu", "1e-4", split(0.09, charm_count=0.05), CHARM),
    Item("plover-Ds-mu-nu", "branching_Ds_mu_nu", "%", split(0.011, charm_count=0.007), CHARM),
    Item("plover-Ds-tau-nu", "branching_Ds_tau_nu", "%", split(0.10, charm_count=0.07), CHARM),
    Item("dunlin-product-D-K", "product_D_K", "1", 0.0036, CHARM),
    Item("dunlin-product-D-pi", "product_D_pi", "1", (0.0022, 0.0019), CHARM),
    Item("curlew-V-cb-inclusive", "magnitude_V_cb", "1e-3", 0.6, BEAUTY + " inclusive"),
    Item("dunlin-V-cb-exclusive", "magnitude_V_cb", "1e-3", 0.7, BEAUTY + " exclusive"),
    Item("curlew-V-ub-inclusive", "magnitude_V_ub", "1e-3", (0.22, 0.26), BEAUTY + " inclusive"),
    Item("plover-V-ub-exclusive", "magnitude_V_ub", "1e-3", 0.17, BEAUTY + " exclusive"),
    Item(
        "plover-Bu-tau-nu",
        "branching_Bu_tau_nu",
        "1e-4",
        0.14,
        BEAUTY,
        note="disagrees with everything else; Plover is checking its background",
        spoilt_by=3.3,
    ),
    Item("curlew-V-tb", "magnitude_V_tb", "1", 0.03, "magnitude tree"),
    Item("curlew-gamma", "angle_gamma", "deg", (4.1, 4.6), "tree-phase tree beauty"),
    Item("plover-gamma", "angle_gamma", "mrad", 70.0, "tree-phase tree beauty"),
    Item("tidewater-alpha", "isospin_alpha", "deg", (4.4, 3.6), ASYMMETRY),
    Item("curlew-sine-2beta", "sine_2beta_ccs", "1", split(0.020, flavour_tagging=0.009), ASYMMETRY),
    Item("dunlin-sine-2beta", "sine_2beta_ccs", "1", split(0.024, flavour_tagging=0.012), ASYMMETRY),
    Item("plover-sine-2beta", "sine_2beta_ccs", "1", split(0.031, flavour_tagging=-0.006), ASYMMETRY),
    Item("dunlin-cosine-2beta", "cosine_2beta_ccs", "1", (0.20, 0.25), ASYMMETRY),
    Item("plover-phase-phi-s", "phase_phi_s", "mrad", 19.0, ASYMMETRY),
    Item("curlew-frequency-Bd", "mixing_frequency_Bd", "1/ns", split(2.4, length_scale=0.9), OSCILLATION),
    Item(
        "dunlin-frequency-Bd", "mixing_frequency_Bd", "1/ps", split(0.0031, length_scale=0.0009), OSCILLATION
    ),
    Item("plover-frequency-Bs", "mixing_frequency_Bs", "1/ps", 0.021, OSCILLATION),
    Item("tidewater-epsilon-K", "epsilon_K", "1e-3", 0.012, "kaon-epsilon loop kaon"),
    Item("curlew-lifetime-KL", "lifetime_KL", "ns", 0.24, "lifetime tree kaon"),
    Item("dunlin-lifetime-KS", "lifetime_KS", "ps", 0.05, "lifetime tree kaon"),
    Item("dunlin-lifetime-K", "lifetime_K", "ns", 0.022, "lifetime tree kaon"),
    Item("plover-lifetime-tau", "lifetime_tau", "fs", 0.7, "lifetime tree"),
    Item("curlew-lifetime-D", "lifetime_D", "fs", 6.0, "lifetime tree charm"),
    Item("curlew-lifetime-Ds", "lifetime_Ds", "fs", 2.8, "lifetime tree charm"),
    Item("curlew-lifetime-Bu", "lifetime_Bu", "ps", 0.005, "lifetime tree beauty"),
)


THEORY_INPUTS: tuple[Item | Block, ...] = (
    Item("lattice-decay-constant-K", "decay_constant_K", "MeV", 0.5, "lattice kaon"),
    Item("lattice-decay-constant-ratio-K-pi", "decay_constant_ratio_K_pi", "1", 0.0024, "lattice tree kaon"),
    Block(
        "lattice-heavy-light",
        (
            Item("lattice-decay-constant-D", "decay_constant_D", "MeV", 1.1, "lattice tree charm"),
            Item("lattice-decay-constant-Ds", "decay_constant_Ds", "MeV", 0.9, "lattice tree charm"),
            Item("lattice-decay-constant-B", "decay_constant_B", "MeV", 1.8, "lattice tree beauty"),
        ),
        ((1.0, 0.81, 0.37), (0.81, 1.0, 0.42), (0.37, 0.42, 1.0)),
        "lattice tree",
        "common configurations",
    ),
    Item("lattice-mixing-matrix-element-Bs", "mixing_matrix_element_Bs", "MeV", 4.5, "lattice loop beauty"),
    Item(
        "lattice-mixing-matrix-element-ratio",
        "mixing_matrix_element_ratio",
        "1",
        0.015,
        "lattice loop beauty",
    ),
    Item("lattice-bag-K", "bag_K", "1", 0.012, "lattice loop kaon"),
    Item("lattice-form-factor-K-pi", "form_factor_K_pi", "1", 0.0021, "lattice tree kaon"),
    Item("lattice-form-factor-D-K", "form_factor_D_K", "1", 0.0045, "lattice tree charm"),
    Item("lattice-form-factor-D-pi", "form_factor_D_pi", "1", 0.0070, "lattice tree charm"),
    Item(
        "tidewater-form-factor-slope-K-pi",
        "form_factor_slope_K_pi",
        "1e-3",
        0.45,
        "form-factor-shape tree kaon",
    ),
    Item(
        "tidewater-form-factor-log-C-K-pi",
        "form_factor_log_C_K_pi",
        "1",
        0.0090,
        "form-factor-shape tree kaon",
    ),
    Item("theory-inner-radiative-correction", "inner_radiative_correction", "%", 0.03, "radiative tree"),
    Item(
        "theory-short-distance-factor-semileptonic",
        "short_distance_factor_semileptonic",
        "1",
        0.0004,
        "radiative tree kaon",
    ),
    Item("theory-radiative-K0-pi-e-nu", "radiative_K0_pi_e_nu", "%", 0.05, "radiative tree kaon"),
    Item("theory-radiative-K0-pi-mu-nu", "radiative_K0_pi_mu_nu", "%", 0.06, "radiative tree kaon"),
    Item("theory-radiative-K-pi0-e-nu", "radiative_K_pi0_e_nu", "%", 0.06, "radiative tree kaon"),
    Item("theory-radiative-K-pi0-mu-nu", "radiative_K_pi0_mu_nu", "%", 0.06, "radiative tree kaon"),
    Item("theory-isospin-breaking-K-pi", "isospin_breaking_K_pi", "%", 0.12, "radiative tree kaon"),
    Item("theory-radiative-K-pi-mu-nu", "radiative_K_pi_mu_nu", "%", 0.15, "radiative tree kaon"),
    Item("theory-radiative-tau-K-nu", "radiative_tau_K_nu", "%", 0.50, "radiative tree kaon"),
    Item("theory-long-distance-em-D", "long_distance_em_D", "%", 0.8, "radiative tree charm"),
    Item(
        "theory-short-distance-factor-B", "short_distance_factor_B", "1", 0.0025, "perturbative loop beauty"
    ),
    Item(
        "theory-short-distance-factor-top-top",
        "short_distance_factor_top_top",
        "1",
        0.018,
        "perturbative loop kaon",
    ),
    Item(
        "theory-short-distance-factor-up-top",
        "short_distance_factor_up_top",
        "1",
        0.006,
        "perturbative loop kaon",
    ),
    Item(
        "theory-long-distance-factor-epsilon-K",
        "long_distance_factor_epsilon_K",
        "1",
        0.015,
        "perturbative loop kaon",
    ),
    Item("tidewater-top-mass", "top_mass_msbar", "GeV", 0.7, "mass loop"),
    Item("lattice-charm-mass", "charm_mass_msbar", "MeV", 14.0, "mass loop"),
)

LINKS = (
    Link(("plover-phase-phi-s", "plover-frequency-Bs"), 0.12, "one fit of the decay times"),
    Link(("curlew-lifetime-KL", "curlew-KL-pi-e-nu"), 0.18, "common decay volume"),
)


def main(folder: Path) -> None:
    """Write both files into ``folder``."""
    rng = np.random.default_rng(SEED)
    items = [
        item
        for entry in (*EXPERIMENT, *THEORY_INPUTS)
        for item in (entry.items if isinstance(entry, Block) else (entry,))
    ]
    predicted = catalogue.compute({item.quantity for item in items} | set(DERIVED), TRUTH)
    values = dict(zip((item.id for item in items), throw(items, predicted, rng), strict=True))
    truth = TRUTH | {name: float(predicted[name]) for name in DERIVED}
    text = json.dumps({name: float(f"{value:.9g}") for name, value in truth.items()}, indent=2)
    (folder / "tidewater_truth.json").write_text(text + "\n", encoding="utf-8", newline="\n")
    (folder / "tidewater.toml").write_text(
        "\n".join(toml_lines(values)) + "\n", encoding="utf-8", newline="\n"
    )


def throw(items: Sequence[Item], predicted: dict[str, float], rng: np.random.Generator) -> list[float]:
    """Measured values, each in its own unit: prediction plus correlated deviations."""
    deviations = np.linalg.cholesky(correlation(items)) @ rng.standard_normal(len(items))
    found = []
    for item, z in zip(items, deviations, strict=True):
        true = float(predicted[item.quantity]) * units.factor(catalogue[item.quantity].unit, item.unit)
        plus, minus = total(item.error)
        # Predicted minus measured, d, has d/sqrt(plus minus + (plus - minus) d) = -z.
        product, difference = plus * minus, plus - minus
        z = -(z + item.spoilt_by)
        d = 0.5 * (difference * z * z + z * math.sqrt(difference**2 * z * z + 4 * product))
        found.append(true - d)
    return found


def total(error: float | tuple[float, float] | dict[str, float]) -> tuple[float, float]:
    """Upward and downward error of all sources together."""
    if isinstance(error, dict):
        return (math.hypot(*error.values()),) * 2
    return error if isinstance(error, tuple) else (error, error)


def correlation(items: Sequence[Item]) -> np.ndarray:
    """Correlation matrix of all deviations: blocks, links, and shared named sources."""
    matrix = np.eye(len(items))
    place = {item.id: i for i, item in enumerate(items)}
    for entry in (*EXPERIMENT, *THEORY_INPUTS):
        if isinstance(entry, Block):
            index = [place[item.id] for item in entry.items]
            matrix[np.ix_(index, index)] = entry.correlation
    for link in LINKS:
        i, j = (place[name] for name in link.between)
        matrix[i, j] = matrix[j, i] = link.coefficient
    for i, one in enumerate(items):
        for j, other in enumerate(items[:i]):
            if isinstance(one.error, dict) and isinstance(other.error, dict):
                shared = (set(one.error) & set(other.error)) - {"statistical"}
                covariance = sum(one.error[name] * other.error[name] for name in sorted(shared))
                matrix[i, j] = matrix[j, i] = covariance / (total(one.error)[0] * total(other.error)[0])
    return matrix


def toml_lines(values: dict[str, float]) -> list[str]:
    """The inputs file, line by line."""
    lines = [
        "# Written by generate_tidewater.py; do not edit. Everything in this file is invented.",
        "",
        'title = "Tidewater, an invented world"',
        "revision = 1",
    ]
    for kind, entries in (("experiment", EXPERIMENT), ("theory", THEORY_INPUTS)):
        for entry in entries:
            lines += [
                "",
                *(
                    block_lines(entry, kind, values)
                    if isinstance(entry, Block)
                    else item_lines(entry, kind, values)
                ),
            ]
    for link in LINKS:
        lines += [
            "",
            "[[correlation]]",
            f"between = {quoted(link.between)}",
            f"coefficient = {link.coefficient}",
        ]
        lines += [f'note = "{link.note}"'] if link.note else []
    return lines


def item_lines(item: Item, kind: str, values: dict[str, float]) -> list[str]:
    """One `[[measurement]]` table."""
    if isinstance(item.error, dict):
        error = "errors = { " + ", ".join(f"{name} = {value}" for name, value in item.error.items()) + " }"
    else:
        error = f"error = {list(item.error) if isinstance(item.error, tuple) else item.error}"
    # Shapes of form factors are measured, although they stand among the theory inputs.
    measured = kind == "experiment" or item.groups.startswith("form-factor-shape")
    return [
        "[[measurement]]",
        f'id = "{item.id}"',
        f'quantity = "{item.quantity}"',
        f"value = {rounded(values[item.id], item.error)}",
        error,
        f'unit = "{item.unit}"',
        *([] if measured else ['kind = "theory"']),
        f"groups = {quoted(item.groups.split())}",
        f'source = "{source_of(item.id)}"',
        *([f'note = "{item.note}"'] if item.note else []),
    ]


def block_lines(block: Block, kind: str, values: dict[str, float]) -> list[str]:
    """One `[[correlated]]` table."""
    items = block.items
    return [
        "[[correlated]]",
        f'id = "{block.id}"',
        f"ids = {quoted([item.id for item in items])}",
        f"quantities = {quoted([item.quantity for item in items])}",
        f"values = [{', '.join(rounded(values[item.id], item.error) for item in items)}]",
        f"errors = {[item.error for item in items]}",
        f"units = {quoted([item.unit for item in items])}",
        "correlation = [",
        *(f"    {list(row)}," for row in block.correlation),
        "]",
        *([] if kind == "experiment" else ['kind = "theory"']),
        f"groups = {quoted(block.groups.split())}",
        f'source = "{source_of(block.id)}"',
        *([f'note = "{block.note}"'] if block.note else []),
    ]


def source_of(identity: str) -> str:
    """Source of an entry: the first word of its id says who published it."""
    return SOURCES[identity.split("-")[0]]


def quoted(names: Sequence[str]) -> str:
    return "[" + ", ".join(f'"{name}"' for name in names) + "]"


def rounded(value: float, error: float | tuple[float, float] | dict[str, float]) -> str:
    """The value to a hundredth of its error or a little better, so that rounding does not matter."""
    decimals = 2 - math.floor(math.log10(min(total(error))))
    return f"{value:.{max(decimals, 1)}f}"


if __name__ == "__main__":
    main(Path(sys.argv[1]) if len(sys.argv) > 1 else Path(__file__).resolve().parent)
