"""Soft-output QAM demapping: noisy symbols to bit log-likelihood ratios."""

from importlib.metadata import version as _version

from pydemap import reference
from pydemap.constellation import Constellation, cross_qam, rectangular_qam, square_qam
from pydemap.demapper import (
    SoftDemapper,
    Word,
    available_isas,
    estimate_noise_variance,
    get_include,
    isa,
    soft_symbols,
    use_isa,
)
from pydemap.mapping import available_mappings, published_mapping

__version__ = _version("pydemap")

__all__ = [
    "Constellation",
    "SoftDemapper",
    "Word",
    "available_isas",
    "available_mappings",
    "cross_qam",
    "estimate_noise_variance",
    "get_include",
    "isa",
    "published_mapping",
    "rectangular_qam",
    "reference",
    "soft_symbols",
    "square_qam",
    "use_isa",
]
