"""The report of a sweep: one page with its numbers inside, which asks nothing of the outside."""

from __future__ import annotations

import json
from collections import Counter
from itertools import combinations
from typing import TYPE_CHECKING, Any

import numpy as np
import xarray as xr
from numpy.typing import NDArray

from gravbasin import labels
from gravbasin.report.canvas import svg
from gravbasin.report.html import provenance_rows, template
from gravbasin.report.sweep_figures import heat_figure
from gravbasin.report.words import given, number
from gravbasin.runs.sampling import Axis
from gravbasin.runs.sensitivity import Bins, Ranking, bins_of, means_over, ranking
from gravbasin.runs.variants import description_of, unit_of

if TYPE_CHECKING:
    from gravbasin.scenario import Scenario, Sweep

__all__ = ["sweep_report"]

Array = NDArray[np.float64]

CAUTIONS = (
    "Every number is of a model under the noise of the scenario: no case was compared with a map.",
    "Gravity alone never proves an impact, and other bodies can make the same anomaly: a case that would be seen is "
    "not yet one that could be told from its rivals.",
    "Field safety, land access and drilling are matters for licensed practice and local rules.",
)

SHOWN_CASES = 4000
"""Cases in the page's own table; cases.csv and cases.nc hold all."""

RANKED = ("signal_to_noise", "detection_probability", "peak_mgal", "vanishing_erosion_km", "excess_mass_kg")

COLOURS = 24


def sweep_report(scenario: Scenario, cases: xr.Dataset) -> str:
    """The page of a finished sweep.

    Parameters
    ----------
    scenario : Scenario
        With its [sweep] table.
    cases : Dataset (case)
        Fields, scalars and failures; profiles and maps are not needed.

    Returns
    -------
    str
        HTML with styles, figure, numbers and a small script inside; without the script, a still heat map and the
        rankings remain.
    """
    sweep = scenario.sweep
    assert sweep is not None
    names = [f.field for f in sweep.fields]
    scalars = [str(n) for n in cases.data_vars if n not in {*names, "failure"}]
    bins = {name: bins_of(cases, Axis.of(f)) for name, f in zip(names, sweep.fields, strict=True)}
    ranks = {s: ranking(cases, sweep, s) for s in RANKED if s in scalars and np.isfinite(cases[s]).any()}
    pair = _first_pair(names, {f.field for f in sweep.fields if Axis.of(f).words}, ranks)
    failed = Counter(reason for reason in cases.failure.values.tolist() if reason)
    page: str = template("sweep.html.j2").render(
        name=scenario.name,
        note=scenario.note,
        cautions=CAUTIONS,
        total=cases.sizes["case"],
        failures=failed.most_common(12),
        other_failures=sum(failed.values()) - sum(n for _, n in failed.most_common(12)),
        fields=[_field_row(cases, f.field, sweep) for f in sweep.fields],
        design=sweep.design,
        draws=sweep.draws,
        scalars=[_scalar_row(cases, s) for s in scalars],
        ranks=[(_words(cases, s), _rank_rows(r), r.how) for s, r in ranks.items()],
        still=_still(cases, bins, pair) if pair else "",
        shown=min(SHOWN_CASES, cases.sizes["case"]),
        data=_embedded(_data(cases, names, scalars, bins, pair)),
        provenance=provenance_rows(labels.read_provenance(cases)),
    )
    return page


def _first_pair(names: list[str], words: set[str], ranks: dict[str, Ranking]) -> tuple[str, str] | None:
    """The two fields that matter most to the signal-to-noise ratio, or the first two; numbers before words."""
    if len(names) < 2:
        return None
    known = ranks.get("signal_to_noise")
    order = [e.field for e in known.effects] if known and known.effects else names
    first, second = sorted(order, key=lambda name: name in words)[:2]
    return first, second


def _words(cases: xr.Dataset, name: str) -> str:
    """What a variable is, with its unit."""
    attrs = cases[name].attrs
    unit = _unit(str(attrs.get("units", "1")))
    return f"{attrs.get('long_name', name)}{f' ({unit})' if unit else ''}"


def _axis_words(cases: xr.Dataset, name: str) -> str:
    """The same, short enough for an axis."""
    words = _words(cases, name)
    return words if len(words) <= 48 else name


def _unit(unit: str) -> str:
    return "" if unit == "1" else unit.replace("m-3", "m⁻³").replace("-1", "⁻¹").replace("km3", "km³")


def _field_row(cases: xr.Dataset, field: str, sweep: Sweep) -> dict[str, str]:
    axis = Axis.of(next(f for f in sweep.fields if f.field == field))
    if axis.words:
        taken = ", ".join(str(w).lower() if isinstance(w, bool) else str(w) for w in axis.words)
    elif 0 < axis.levels.size <= 12:
        taken = ", ".join(given(v) for v in axis.levels)
    else:
        steps = f", {axis.levels.size} steps" if axis.levels.size else ""
        taken = f"{given(axis.low)} to {given(axis.high)}{', even in the logarithm' if axis.log else ''}{steps}"
    return {"field": field, "taken": taken, "unit": _unit(unit_of(field)), "meaning": description_of(field)}


def _scalar_row(cases: xr.Dataset, name: str) -> dict[str, str]:
    values = cases[name].values[np.isfinite(cases[name].values)]
    low, middle, high = np.quantile(values, [0.05, 0.5, 0.95]) if values.size else (np.nan,) * 3
    row = {"low": number(low), "median": number(middle), "high": number(high)}
    return {"name": name, "meaning": _words(cases, name), **row}


def _rank_rows(found: Ranking) -> list[dict[str, Any]]:
    return [
        {
            "field": e.field,
            "first": _index(e.first, e.first_error),
            "total": _index(e.total, e.total_error) if np.isfinite(e.total) else "not told by this sample",
            "width": f"{100 * min(max(e.first, 0.0), 1.0):.0f}",
            "more": f"{100 * min(max(e.total - max(e.first, 0.0), 0.0), 1.0):.0f}" if np.isfinite(e.total) else "0",
        }
        for e in found.effects
    ]


def _index(value: float, error: float) -> str:
    text = f"{round(value, 2) + 0.0:.2f}".replace("-", "−")
    return f"{text} ± {error:.2f}" if error else text


def _still(cases: xr.Dataset, bins: dict[str, Bins], pair: tuple[str, str]) -> str:
    means, _ = means_over(cases.signal_to_noise.values, bins[pair[0]], bins[pair[1]])
    if not np.isfinite(means).any():
        return ""
    across, up = (_axis_words(cases, name) for name in pair)
    words = (_words(cases, "signal_to_noise").split(",")[0], across, up)
    figure = heat_figure(means, bins[pair[0]], bins[pair[1]], words=words)
    span = f"from {np.nanmin(means):.3g} to {np.nanmax(means):.3g}"
    text = f"Mean signal-to-noise ratio over {pair[0]} and {pair[1]}, {span}."
    return svg(figure, name="heat", title="Heat map", description=text)


def _data(
    cases: xr.Dataset, names: list[str], scalars: list[str], bins: dict[str, Bins], pair: tuple[str, str] | None
) -> dict[str, Any]:
    """What the script works on: bins and means for every pair of fields, and the cases of the table."""
    means = {}
    for (i, x), (j, y) in combinations(enumerate(names), 2):
        for scalar in scalars:
            means[f"{i} {j} {scalar}"] = _rounded(means_over(cases[scalar].values, bins[x], bins[y])[0].ravel(), 4)
    total = cases.sizes["case"]
    chosen = np.unique(np.linspace(0, total - 1, min(SHOWN_CASES, total)).round().astype(int))
    columns = {name: _column(cases[name].values[chosen]) for name in (*names, *scalars)}
    return {
        "fields": [
            {
                "name": n,
                "words": _axis_words(cases, n),
                "labels": list(bins[n].labels),
                "edges": _rounded(bins[n].edges, 4),
            }
            for n in names
        ],
        "scalars": [{"name": s, "words": _words(cases, s)} for s in scalars],
        "first": [names.index(p) for p in pair] if pair else None,
        "means": means,
        "colours": {"batlow": _colours("batlow"), "vik": _colours("vik")},
        "columns": ["case", *columns, "failure"],
        "rows": [
            list(row)
            for row in zip(chosen.tolist(), *columns.values(), cases.failure.values[chosen].tolist(), strict=True)
        ],
    }


def _column(values: Any) -> list[Any]:
    if values.dtype.kind == "f":
        return _rounded(values, 5)
    return [str(v).lower() if isinstance(v, bool) else v for v in values.tolist()]


def _rounded(values: Array, digits: int) -> list[float | None]:
    return [float(f"{v:.{digits}g}") if np.isfinite(v) else None for v in values.tolist()]


def _colours(name: str) -> list[str]:
    from cmcrameri import cm
    from matplotlib.colors import to_hex

    return [to_hex(c) for c in getattr(cm, name)(np.linspace(0.0, 1.0, COLOURS))]


def _embedded(data: dict[str, Any]) -> str:
    """JSON that no value in it can end early."""
    text = json.dumps(data, ensure_ascii=False, separators=(",", ":"), allow_nan=False)
    return text.replace("<", "\\u003c").replace("\u2028", "\\u2028").replace("\u2029", "\\u2029")
