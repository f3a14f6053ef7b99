"""What theory predicts: quark-mixing quantities as functions of parameters.

``catalogue`` is the public way in; the modules of this package add to it on import.
"""

from observables.catalogue import Catalogue, Complex, Real, constant, parameter, quantity
from observables.catalogue import catalogue as _catalogue
from observables.hypothesis import Hypothesis

# The order of import is the order of declaration, and so of the parameters of a problem.
from observables import (  # noqa: F401  # isort: skip
    mixing_matrix,
    constants,
    beta_decays,
    leptonic_decays,
    semileptonic_decays,
    scale_evolution,
    neutral_mixing,
    kaon_mixing,
    cp_asymmetries,
)

# The name `catalogue` of this package is the object, not the module that defines it.
catalogue: Catalogue = _catalogue

__all__ = [
    "Catalogue",
    "Complex",
    "Hypothesis",
    "Real",
    "catalogue",
    "constant",
    "parameter",
    "quantity",
]
