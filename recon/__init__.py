"""Compressed-sensing reconstruction of undersampled multi-coil Cartesian MRI.

The package is numerics alone: it reads no environment, no clock, no network, and imports nothing of `service`.
Start with `recon.pipeline.reconstruct`, the main path.
"""

from recon.caution import CAUTION

__all__ = ["CAUTION"]
