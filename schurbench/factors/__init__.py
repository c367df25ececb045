"""Factors: what a run leaves in the engineer's hands, with a certificate.

`assemble` turns a run into `Factors` of the loaded matrix; `Factors.certificate` measures them, `Factors.reorder`
brings chosen eigenvalues to the top, `Factors.save` writes them with a manifest, and `check_manifest` holds a saved
manifest against the files beside it.
"""

from __future__ import annotations

from schurbench.factors.assemble import assemble
from schurbench.factors.certificate import Certificate
from schurbench.factors.core import Factors, ScaledFactors
from schurbench.factors.manifest import ManifestReport, check_manifest
from schurbench.factors.reorder import RefusedSwap

__all__ = ["Certificate", "Factors", "ManifestReport", "RefusedSwap", "ScaledFactors", "assemble", "check_manifest"]
