"""What the bench writes: a material entry for a set, the JSON of a fit, a calibrated setup."""

from __future__ import annotations

import datetime
import json
import math
from collections.abc import Iterator, Mapping
from typing import Any

from stackopt.bench.calibrate import Calibration
from stackopt.bench.fit import Fit, law_rows
from stackopt.bench.intervals import Estimate
from stackopt.bench.words import count_words, interval_words, value_words
from stackopt.errors import Finding, InputError
from stackopt.physics.permeability import ColeCole, Constant, Debye, Lorentz, PermeabilityLaw
from stackopt.problem import CoaxialLoops
from stackopt.readers.files import join_key
from stackopt.units import format_frequency, format_thickness

LEAST_TOLERANCE = 0.01
"""Tolerances are rounded up to a hundredth."""
MOST_TOLERANCE_DOWN = 0.95


def entry_toml(fit: Fit, name: str, day: datetime.date) -> str:
    """Write a fitted material as an entry that can be pasted into a material set.

    Parameters
    ----------
    fit : Fit
    name : str
        Name of the material.
    day : date
        Day of the measurement, where the setup states none.

    Raises
    ------
    InputError
        For a name that a material cannot have.
    """
    if not name or name != " ".join(name.split()) or "/" in name or not name.isprintable():
        message = f"found {name!r}; a name may hold letters, figures and single blanks, but no '/'"
        raise InputError(Finding("", "--material", message))
    files = ", ".join(dict.fromkeys(entry.sweep.name for entry in fit.setup.sweeps))
    measured = f"measured, {files}, {fit.setup.date or day.isoformat()}"
    key = join_key("materials", [name])
    values = dict(_values(fit))
    lines = [f"# Fitted by stackopt bench to {count_words(len(fit.setup.sweeps), 'sweep')}; intervals are 95 %."]
    lines += [f"# {sentence}" for sentence in (*_interval_comments(fit), *fit.showing.sentences)]
    lines.append(f"[{key}]")
    lines += [f"{word} = {value}" for word, value in values.items()]
    if "density" not in values:
        lines.append('# density is not measured here and a set needs it: density = "... kg/m^3"')
    lines.append(f'notes = "fitted to a sweep; {_used_words(fit)}"')
    lines.append(f"[{key}.origin]")
    lines += [f"{word} = {_text(_origin(fit, word, measured))}" for word in values]
    if "density" not in values:
        lines.append('# density = "where it comes from"')
    return "\n".join(lines) + "\n"


def _values(fit: Fit) -> Iterator[tuple[str, str]]:
    """Yield the keys of an entry with their values as TOML."""
    given = fit.setup.entry
    fitted = _text(value_words(fit.conductivity_s_per_m, "S/m", 4))
    yield "conductivity", _toml(given["conductivity"]) if "conductivity" in given else fitted
    if "density" in given:
        yield "density", _toml(given["density"])
    yield "permeability", _toml(given["permeability"]) if "permeability" in given else law_toml(fit.permeability)
    for key in ("permittivity", "price_per_kg", "saturation", "anodic_index"):
        if key in given:
            yield key, _toml(given[key])
    gauges = sorted(dict.fromkeys(entry.thickness_m for entry in fit.setup.sweeps))
    yield "gauges", "[" + ", ".join(_text(_spaced(gauge)) for gauge in gauges) + "]"
    tolerance = _tolerance(fit)
    if tolerance:
        yield "tolerance", tolerance


def _spaced(thickness_m: float) -> str:
    text = format_thickness(thickness_m)
    return f"{text[:-2]} {text[-2:]}"


def law_toml(law: PermeabilityLaw) -> str:
    """Write a law of a fit as TOML.

    Examples
    --------
    >>> law_toml(Debye(102.0, 2e7))
    '{law = "debye", initial = 102, relaxation = "20.00 MHz"}'
    """
    if isinstance(law, Constant):
        return f"{law.value:.5g}"
    if isinstance(law, Debye):
        parts = {"law": "debye", "initial": law.initial, "relaxation": _hertz(law.relaxation_hz)}
    elif isinstance(law, ColeCole):
        parts = {
            "law": "cole-cole",
            "initial": law.initial,
            "relaxation": _hertz(law.relaxation_hz),
            "broadening": law.broadening,
        }
    elif isinstance(law, Lorentz):
        parts = {
            "law": "lorentz",
            "initial": law.initial,
            "resonance": _hertz(law.resonance_hz),
            "damping": _hertz(law.damping_hz),
        }
    else:
        raise ValueError(f"a fit gives no {type(law).__name__}")
    if not isinstance(law, Lorentz) and law.high_frequency != 1.0:
        parts["high_frequency"] = law.high_frequency
    return _toml(parts)


def _hertz(frequency_hz: float) -> str:
    return value_words(frequency_hz, "Hz", 4)


def _toml(value: Any) -> str:
    """Write a value on one line of TOML."""
    if isinstance(value, Mapping):
        return "{" + ", ".join(f"{join_key('', [key])} = {_toml(item)}" for key, item in value.items()) + "}"
    if isinstance(value, list):
        return "[" + ", ".join(_toml(item) for item in value) + "]"
    if isinstance(value, bool):
        return str(value).lower()
    return f"{value:.5g}" if isinstance(value, float) else _text(value) if isinstance(value, str) else str(value)


def _text(text: str) -> str:
    return json.dumps(text, ensure_ascii=False)


def _tolerance(fit: Fit) -> str:
    """Write the intervals as tolerances, the wider of both kinds of interval."""
    found = {estimate.name: estimate for estimate in fit.estimates if estimate.determined}
    parts = {}
    if fit.setup.uncertainty.thickness > 0.0:
        parts["thickness"] = f"{_percent_up(fit.setup.uncertainty.thickness)} %"
    for key, name in (("conductivity", "conductivity"), ("permeability", "initial")):
        if name in found:
            parts[key] = _both_sides(found[name])  # type: ignore[assignment]
    return _toml(parts) if parts else ""


def _both_sides(estimate: Estimate) -> list[str]:
    low, high = widest(estimate)
    down = min(1.0 - low / estimate.value, MOST_TOLERANCE_DOWN)
    return [f"-{_percent_up(down)} %", f"+{_percent_up(high / estimate.value - 1.0)} %"]


def widest(estimate: Estimate) -> tuple[float, float]:
    """Return the wider limits of the interval from the Jacobian and that of the bootstrap."""
    low, high = estimate.bootstrap or (estimate.low, estimate.high)
    return min(low, estimate.low), max(high, estimate.high)


def _percent_up(share: float) -> int:
    return max(math.ceil(share * 100.0 - 1e-6), round(LEAST_TOLERANCE * 100.0))


def _origin(fit: Fit, word: str, measured: str) -> str:
    if word == "gauges":
        return f"stated in {fit.setup.name}"
    if word == "tolerance":
        return f"{measured}: 95 % intervals of the fit, thickness as stated"
    if word in fit.setup.entry:
        return fit.setup.origin.get(word, f"stated in {fit.setup.name}")
    vague = {estimate.name for estimate in fit.estimates if not estimate.determined}
    if word == "conductivity" and "conductivity" in vague:
        return f"{measured}: not determined by the sweep, see the remarks above"
    return f"{measured}; intrinsic" if word == "permeability" else measured


def _used_words(fit: Fit) -> str:
    low = min(points.frequency_hz[0] for points in fit.solution.residuals.points)
    high = max(points.frequency_hz[-1] for points in fit.solution.residuals.points)
    return f"sure from {format_frequency(low)} to {format_frequency(high)} only"


def _interval_comments(fit: Fit) -> Iterator[str]:
    for estimate in fit.estimates:
        if estimate.determined:
            words = interval_words(estimate.value, *widest(estimate), estimate.unit)
            yield f"{estimate.name}: {words}"


def fit_json(fit: Fit, name: str, version: str) -> str:
    """Write a fit as JSON, in SI units at full precision; NaN is written as null."""
    solution = fit.solution
    data = {
        "material": name,
        "stackopt": version,
        "setup": fit.setup.name,
        "sweeps": [
            {
                "file": points.entry.sweep.name,
                "thickness_m": points.entry.thickness_m,
                "count": points.entry.count,
                "frequency_hz": list(points.frequency_hz),
                "measured_db": points.measured_db.tolist(),
                "fitted_db": fitted.tolist(),
            }
            for points, fitted in zip(solution.residuals.points, _fitted(fit), strict=True)
        ],
        "laws": [
            {"law": law, "values": values, "rms_db": rms, "aicc_over_least": aicc, "chosen": chosen}
            for law, values, rms, aicc, chosen in law_rows(fit)
        ],
        "values": [
            {
                "name": item.name,
                "unit": item.unit,
                "value": item.value,
                "low": item.low,
                "high": item.high,
                "bootstrap": item.bootstrap,
                "determined": item.determined,
            }
            for item in fit.estimates
        ],
        "nuisances": [
            {"kind": item.kind, "standard_deviations": float(value), "size": item.size, "thickness_m": item.thickness_m}
            for item, value in zip(
                solution.residuals.nuisances, solution.variables[solution.residuals.free :], strict=True
            )
        ],
        "shown": [vars(combination) for combination in fit.showing.combinations],
        "singular_values": list(fit.showing.singular_values),
        "sentences": list(fit.showing.sentences),
        "noise_db": solution.noise_db,
        "bootstrap_replicates": fit.replicates,
        "remarks": list(fit.remarks),
    }
    return json.dumps(_finite(data), indent=1, ensure_ascii=False, allow_nan=False) + "\n"


def _fitted(fit: Fit) -> Iterator[Any]:
    import numpy as np

    for points in fit.solution.residuals.points:
        yield fit.fitted_db(points, np.array(points.frequency_hz))


def _finite(value: Any) -> Any:
    if isinstance(value, dict):
        return {key: _finite(item) for key, item in value.items()}
    if isinstance(value, list | tuple):
        return [_finite(item) for item in value]
    return None if isinstance(value, float) and not math.isfinite(value) else value


def setup_toml(calibration: Calibration, day: datetime.date) -> str:
    """Write the calibrated coils as the tables that a setup file begins with."""
    field, setup = calibration.field, calibration.setup
    files = ", ".join(dict.fromkeys(entry.sweep.name for entry in setup.sweeps))
    lines = [
        f"# Calibrated by stackopt bench with {files}, {setup.date or day.isoformat()}; stated in {setup.name}.",
        "# Radii are held from now on; what is still unsure is in the uncertainty of the gaps (95 %).",
        "[field]",
        f'kind = "{field.kind}"',
    ]
    if isinstance(field, CoaxialLoops):
        lines += [f'source_radius = "{_millimetres(field.source_radius_m)}"']
        lines += [f'victim_radius = "{_millimetres(field.victim_radius_m)}"']
    lines += [
        f'source_gap = "{_millimetres(field.source_gap_m)}"',
        f'victim_gap = "{_millimetres(field.victim_gap_m)}"',
    ]
    lines += ["", "[uncertainty]", f'gaps = "{_millimetres(calibration.gap_uncertainty_m)}"', 'radii = "0 mm"']
    return "\n".join(lines) + "\n"


def _millimetres(length_m: float) -> str:
    return f"{length_m * 1e3:.4g} mm"
