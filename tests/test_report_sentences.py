"""Sentences say what their numbers say: each branch at both sides of its threshold."""

from __future__ import annotations

from typing import Any

import pytest

import gravbasin as gb
from gravbasin.crater import Range
from gravbasin.report import sentences

PRIOR = {"rim_diameter_km": Range(20.0, 80.0, logarithmic=True), "erosion_km": Range(0.0, 4.0)}


def fit(correlation: float | None = 0.1, effective: float = 500.0, **intervals: tuple[float, float]) -> dict[str, Any]:
    spans = {"rim_diameter_km": (38.0, 42.0), "erosion_km": (1.0, 1.5)} | intervals
    ends = {name: {"low": low, "high": high} for name, (low, high) in spans.items()}
    return {"fit": {"diameter_erosion_correlation": correlation, "effective_models": effective, **ends}}


@pytest.mark.parametrize(
    ("correlation", "said"),
    [
        (0.93, "a wider structure more worn fits as well"),
        (-0.85, "a wider structure less worn fits as well"),
        (0.6, "in part (posterior correlation +0.60)"),
        (-0.12, "hardly trade against each other here (posterior correlation −0.12)"),
        (None, "Too few models"),
    ],
)
def test_a_trade_is_named_with_its_direction(correlation, said) -> None:
    assert said in sentences.identifiability(fit(correlation), PRIOR)


def test_an_interval_as_wide_as_the_prior_is_no_news() -> None:
    told = sentences.identifiability(fit(erosion_km=(0.2, 3.8)), PRIOR)
    assert "The map says little of the erosion" in told
    # Half of the prior's 90 % in the logarithm: from 20 km, a factor of two of its factor of four, less the tails.
    halved = sentences.identifiability(fit(rim_diameter_km=(30.0, 30.0 * 2**0.9)), PRIOR)
    assert "narrows the diameter to 50 % of the prior's 20 to 80 km" in halved


def test_a_posterior_of_few_models_is_called_rough() -> None:
    assert "worth 12 equally weighted models" in sentences.identifiability(fit(effective=12.3), PRIOR)
    assert "rough" not in sentences.identifiability(fit(effective=80.0), PRIOR)


def test_roundness_speaks_of_the_strongest_order_only_where_noise_does_not_explain_it() -> None:
    uneven = {"ratio": 3.2, "order_power": [1.0, 7.0, 2.0, 2.8], "p_value": 0.01}
    assert "most of all elongated" in sentences.roundness({"circularity": uneven})
    assert "Nothing speaks against" in sentences.roundness({"circularity": uneven | {"p_value": 0.3}})
    assert "Not tested" in sentences.roundness({})


def test_local_level_is_the_central_range_of_an_inverse_gamma() -> None:
    """Drawn: 20,000 variances; the error of a 5 % quantile of the standard deviation is about 0.003."""
    import re

    import numpy as np

    level = {"scale": 1.3, "dof": 12.0}
    drawn = np.sqrt(1.3 * 12.0 / np.random.default_rng(1).chisquare(12.0, 20_000))
    found = {"anywhere": level, "here": level, "texture_weight": 0.0}
    told = re.search(r"between ([\d.]+) and ([\d.]+) times", sentences.local_level({"local_noise_level": found}))
    assert [float(v) for v in told.groups()] == pytest.approx(np.quantile(drawn, [0.05, 0.95]), rel=0.06)
    assert "texture" not in sentences.local_level({"local_noise_level": found})
    found |= {"here": {"scale": 2.0, "dof": 30.0}, "texture_weight": 18.0}
    assert "texture of the map about the centre" in sentences.local_level({"local_noise_level": found})
    assert sentences.local_level({}) == ""


@pytest.mark.parametrize(
    "word",
    [
        "consistent",
        "consistent, not separable from rivals",
        "inconsistent",
        "below detectability",
        "detectable, no map compared",
    ],
)
def test_every_verdict_has_its_meaning(word) -> None:
    scenario = gb.Scenario(crater={"rim_diameter_km": 30.0})
    assert len(sentences.meaning(scenario, {"verdict": word})) > 60


def test_spectrum_grain_and_mask_are_told_by_their_thresholds() -> None:
    spectrum = {
        "wavelength_km": [100.0, 50.0],
        "ratio": [1.1, 2.4],
        "p_value": 0.5,
        "grain_p_value": 0.4,
        "grain_ratio": 2.0,
        "grain_azimuth_deg": 31.0,
    }
    rough = {"structure_left_out": 4.0, "structure_fitted": 4.4}
    verdict = {"noise_check": {"spectrum": spectrum, "roughness_mgal": rough}}
    assert "no grain" in sentences.noise_spectrum(verdict)
    assert "differ" not in sentences.noise_mask(verdict)
    spectrum |= {"p_value": 0.01, "grain_p_value": 0.01}
    rough["structure_fitted"] = 5.0
    assert "near 50 km the map has 2.4 times as much" in sentences.noise_spectrum(verdict)
    assert "smoothest along azimuth 31°" in sentences.noise_spectrum(verdict)
    assert "rougher than the rest" in sentences.noise_mask(verdict)
    assert sentences.noise_spectrum({}) == ""
    assert sentences.noise_mask({}) == ""
    assert sentences.noise_spectrum({"noise_check": {"spectrum": None}}) == ""
