"""What was measured: inputs files, and the likelihood terms that they make."""

from __future__ import annotations

from likelihoods.averaging import Average, average
from likelihoods.bundled import bundled_names, bundled_path
from likelihoods.entries import Block, Correlation, Declared, Entry, Notice, ParameterSetting, Prior
from likelihoods.inputs import Inputs, load_inputs
from likelihoods.terms import CorrelationBlock, Terms

__all__ = [
    "Average",
    "Block",
    "Correlation",
    "CorrelationBlock",
    "Declared",
    "Entry",
    "Inputs",
    "Notice",
    "ParameterSetting",
    "Prior",
    "Terms",
    "average",
    "bundled_names",
    "bundled_path",
    "load_inputs",
]
