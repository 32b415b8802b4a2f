"""The noise model of a map on trial: blocks foretold, spectrum, grain, and what becomes of it without the mask."""

from __future__ import annotations

import dataclasses
from typing import Any

import xarray as xr

from gravbasin.observed import (
    NoiseCheck,
    NoiseModel,
    SpectrumCheck,
    check_noise,
    check_spectrum,
    estimate_noise,
)

__all__ = ["NoiseTrial", "try_noise"]

TRIAL_POINTS = 400
"""Nodes for the estimate without a mask: it is compared, not used."""


@dataclasses.dataclass(frozen=True, eq=False)
class NoiseTrial:
    """How an estimated noise model stands.

    Attributes
    ----------
    blocks : NoiseCheck
        Parts of the map foretold from the rest.
    spectrum : SpectrumCheck or None
        Spectrum and grain against simulated maps; None for a map of too few wavelengths.
    masked_mgal, fitted_mgal : float
        `NoiseModel.roughness` over the structure's diameter, estimated with the structure left out, and with a multiple
        of it estimated together with the noise.
    """

    blocks: NoiseCheck
    spectrum: SpectrumCheck | None
    masked_mgal: float
    fitted_mgal: float

    def as_dict(self) -> dict[str, Any]:
        """What verdict.json holds under noise_check."""
        return dataclasses.asdict(self.blocks) | {
            "spectrum": dataclasses.asdict(self.spectrum) if self.spectrum else None,
            "roughness_mgal": {"structure_left_out": self.masked_mgal, "structure_fitted": self.fitted_mgal},
        }


def try_noise(
    observed: xr.DataArray,
    noise: NoiseModel,
    modelled: xr.DataArray,
    *,
    exclude: tuple[float, float, float],
    diameter: float,
    seed: int,
) -> NoiseTrial:
    """Try a noise model on the map it was estimated from.

    Parameters
    ----------
    observed : DataArray (northing, easting), mGal
        The map.
    noise : NoiseModel
        Estimated with `exclude` left out.
    modelled : DataArray (northing, easting), mGal
        The scenario's structure on the map's nodes.
    exclude : (easting, northing, radius), m
        The disc left out.
    diameter : float, m
        Of the structure.
    seed : int
        Of the nodes and the simulated maps.
    """
    fitted = estimate_noise(
        observed,
        template=modelled,
        regional_order=noise.regional_order,
        resolution_m=noise.resolution_m,
        max_points=TRIAL_POINTS,
        seed=seed,
    )
    return NoiseTrial(
        blocks=check_noise(observed, noise, exclude=exclude),
        spectrum=check_spectrum(observed, noise, exclude, seed=seed),
        masked_mgal=noise.roughness(diameter),
        fitted_mgal=fitted.roughness(diameter),
    )
