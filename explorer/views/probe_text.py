"""One design point in words: a judged probe in, plain data for `probe --json` and text for the terminal out."""

from __future__ import annotations

import math
import textwrap
from collections.abc import Sequence
from typing import Any

import numpy as np

from explorer.study.quantities import format_quantity
from explorer.views.plain import as_json
from explorer.views.probed import Floats, Probed, Row, share_words

_WIDTH = 96
_MOST_POLES = 8  # in the text; fast ones beyond are counted


def facts(probed: Probed) -> dict[str, Any]:
    """Everything the text says, as plain data in SI.

    title, study_sha256, explorer_version; at {axis: value} and at_units; met : whether every scenario within the
    tolerances is known to meet every requirement; scenarios {count, within_tolerances}.
    requirements : [name, measure, sense, limit, unit, nominal, worst, slack, worst_scenario, missed_by, unknown_in],
    the last two as numbers of scenarios within the tolerances; measures : the others, without limit.
    worst_scenarios : [scenario, tolerance_scale, worst_for, parameters]; parameter_units.
    nominal_poles : [z [re, im], s [re, im], natural_frequency, damping_ratio]; slowest_pole {nominal, least, largest},
    each the largest |z|; poles_against_response : [requirement, measure, poles {nominal, worst}, response {…}].
    beyond : [tolerance_scale, missed], requirements missed or unknown within that wider box.
    """
    data, study = probed.dataset, probed.study
    axes = (study.gain, study.period, *study.design)
    units = {str(name): str(unit) for name, unit in zip(data["parameter"].values, data["parameter_unit"].values,
                                                        strict=True)}  # fmt: skip
    slowest = slowest_pole(probed)
    return {
        "title": data.attrs["title"], "study_sha256": data.attrs["study_sha256"],
        "explorer_version": data.attrs["explorer_version"],
        "at": {axis.name: float(data.attrs[f"at_{axis.name}"]) for axis in axes},
        "at_units": {axis.name: axis.unit for axis in axes},
        "met": probed.met,
        "scenarios": {"count": data.sizes["scenario"], "within_tolerances": int(probed.within.sum())},
        "requirements": [_requirement_facts(probed, row) for row in probed.requirements],
        "measures": [_measure_facts(probed, row) for row in probed.others],
        "worst_scenarios": [
            {"scenario": scenario, "tolerance_scale": float(data["scenario_scale"].values[scenario]),
             "worst_for": list(names),
             "parameters": dict(zip(units, data["scenario_parameter"].values[scenario].tolist(), strict=True))}
            for scenario, names in sorted(probed.worst.items())
        ],
        "parameter_units": units,
        "nominal_poles": _pole_facts(probed),
        "slowest_pole": {"nominal": float(slowest[0]), **_ends(slowest[probed.within])},
        "poles_against_response": [
            {"requirement": promise.name, "measure": promise.requirement.measure.name if promise.requirement else "",
             "poles": _nominal_and_worst(promise), "response": _nominal_and_worst(shown)}
            for promise, shown in against(probed)
        ],
        "beyond": [{"tolerance_scale": scale, "missed": missed} for scale, missed in _beyond(probed)],
    }  # fmt: skip


def document(probed: Probed) -> str:
    """The facts as one JSON document: infinities are "inf" and "-inf", unknown is null."""
    return as_json(facts(probed))


def probe_text(probed: Probed) -> str:
    """The same for people."""
    scale = probed.dataset["scenario_scale"].values
    beyond = f", {np.sum(~probed.within)} beyond them (to × {scale.max():g})" if not probed.within.all() else ""
    point = f"At {probed.point}: {probed.within.sum()} scenarios within the tolerances as stated{beyond}"
    lines = [probed.title, *_wrapped(f"{point}; scenario 0 is the nominal plant."), ""]
    heads = ("requirement", "limit", "nominal", "worst", "slack", "worst plant")
    lines += table(heads, [_cells(probed, row) for row in probed.requirements])
    lines += ["", *_wrapped(_verdict(probed))]
    lines += [line for sentence in sentences(probed) for line in _wrapped(sentence)]
    others = [(row.name, row.words(row.nominal), _known(probed, row)) for row in probed.others]
    lines += ["", *table(("other measure", "nominal", "worst"), others)]
    lines += ["", "Worst plants, by the number of their scenario"]
    for scenario, names in sorted(probed.worst.items()):
        lines += _worst_lines(probed, scenario, names)
    lines += [] if probed.worst else ["none is known"]
    return "\n".join([*lines, "", *_pole_lines(probed)])


def against(probed: Probed) -> list[tuple[Row, Row]]:
    """Requirements on a reading by poles, each with the same measure by response."""
    pairs = []
    for row in probed.requirements:
        measure = row.requirement.measure if row.requirement else None
        shown = probed.row(f"{measure.name} by response") if measure and measure.basis == "poles" else None
        if shown is not None:
            pairs.append((row, shown))
    return pairs


def sentences(probed: Probed) -> list[str]:
    """What the poles promise against what the response shows, one sentence for each requirement by poles."""
    said = []
    for promise, shown in against(probed):
        name = promise.requirement.measure.name if promise.requirement else promise.name
        bands = [row.requirement.band if row.requirement else 0.02 for row in (promise, shown)]
        note = f" (bands {100 * bands[0]:g} % and {100 * bands[1]:g} %)" if bands[0] not in (bands[1], math.nan) else ""
        note = "" if name != "settling time" else note
        nominal = f"nominal {promise.words(promise.nominal)} against {shown.words(shown.nominal)}"
        said.append(
            f"{name.capitalize()}: the poles promise {promise.words(promise.worst_value)} at worst, "
            f"the worst plant's response shows {shown.words(shown.worst_value)}; {nominal}{note}."
        )
    return said


def slowest_pole(probed: Probed) -> Floats:
    """Largest |z| of every scenario, (S,); NaN where the poles are unknown."""
    size = np.abs(probed.dataset["pole"].values)
    return np.where(np.isnan(size).all(axis=1), np.nan, np.nan_to_num(size, nan=-1.0).max(axis=1))


def table(heads: Sequence[str], rows: Sequence[Sequence[str]]) -> list[str]:
    """Left-aligned columns under their heads; a long name is shortened."""
    cells = [heads, *[[textwrap.shorten(row[0], 36, placeholder=" …"), *row[1:]] for row in rows]]
    widths = [max(len(row[column]) for row in cells) for column in range(len(heads))]
    lines = ["  ".join(cell.ljust(width) for cell, width in zip(row, widths, strict=True)).rstrip() for row in cells]
    return [lines[0], "  ".join("-" * width for width in widths), *lines[1:]]


def _cells(probed: Probed, row: Row) -> tuple[str, ...]:
    limit = row.asks(probed.period)
    limit = limit if row.full_name == row.kind else f"{row.kind} {limit}"
    missed = " missed" if row.worst_slack < 0 else ""
    worst = "-" if row.worst is None else str(row.worst)
    return (row.full_name, limit, row.words(row.nominal), _known(probed, row),
            f"{share_words(row.worst_slack)}{missed}", worst)  # fmt: skip


def _known(probed: Probed, row: Row) -> str:
    """The worst value, and in how many scenarios it is unknown."""
    unknown = int(probed.unknown_in(row).sum())
    words = row.words(row.worst_value)
    return f"{words}, unknown in {unknown}" if unknown and row.worst is not None else words


def _verdict(probed: Probed) -> str:
    count = int(probed.within.sum())
    missed = [(row.name, int(probed.missed_by(row).sum())) for row in probed.requirements]
    unknown = [(row.name, int(probed.unknown_in(row).sum())) for row in probed.requirements]
    said = []
    if any(number for _, number in missed):
        said.append("Missed: " + ", ".join(f"{name} in {number} of {count}" for name, number in missed if number) + ".")
    if any(number for _, number in unknown):
        listed = ", ".join(f"{name} in {number} of {count}" for name, number in unknown if number)
        said.append(f"Unknown: {listed}.")
    if not said:
        said.append(f"Every requirement is met in all {count} scenarios within the tolerances.")
    for scale, names in _beyond(probed):
        wider = f"Within tolerances × {scale:g}"
        said.append(f"{wider} not met: {', '.join(names)}." if names else f"{wider} all are met too.")
    return " ".join(said)


def _beyond(probed: Probed) -> list[tuple[float, list[str]]]:
    """Every tolerance scale above 1, and what is missed or unknown within it."""
    scale = probed.dataset["scenario_scale"].values
    found = []
    for wider in np.unique(scale[~probed.within]).tolist():
        inside = scale <= wider * (1 + 1e-12)
        missed = [row.name for row in probed.requirements if row.slack is not None
                  and not (row.slack[inside] >= 0).all()]  # fmt: skip
        found.append((wider, missed))
    return found


def _worst_lines(probed: Probed, scenario: int, names: tuple[str, ...]) -> list[str]:
    kind = "nominal plant: " if scenario == 0 else ""
    own = probed.parameters(scenario) or "no parameter varies"
    return [*_wrapped(f"{scenario:>4}  {kind}{own}", 6), *_wrapped(f"      worst for {', '.join(names)}", 8)]


def _pole_lines(probed: Probed) -> list[str]:
    rows = _pole_facts(probed)
    merged = [row for row in rows if row["z"][1] >= 0]
    unit = probed.dataset["pole_s"].attrs["units"]
    cells = [(_complex(*row["z"]), format_quantity(math.hypot(*row["z"]), "1"),
              format_quantity(row["natural_frequency"], unit), format_quantity(row["damping_ratio"], "1"))
             for row in merged[:_MOST_POLES]]  # fmt: skip
    lines = table(("nominal poles, z", "|z|", "natural frequency", "damping ratio"), cells) if cells else []
    if len(merged) > _MOST_POLES:
        lines.append(f"and {len(merged) - _MOST_POLES} that decay faster")
    slowest = slowest_pole(probed)[probed.within]
    unknown = int(np.isnan(slowest).sum())
    ends = _ends(slowest)
    least, largest = _close_to_one(ends["least"]), _close_to_one(ends["largest"])
    said = f"Slowest pole over the scenarios: |z| {least if least == largest else f'from {least} to {largest}'}"
    said = "No poles are known." if unknown == len(slowest) else f"{said}{_decay(probed, ends)}."
    return [*(lines or ["The nominal plant's poles are unknown."]),
            *_wrapped(said + (f" Unknown in {unknown} of {len(slowest)} scenarios." if unknown else ""))]  # fmt: skip


def _decay(probed: Probed, ends: dict[str, float]) -> str:
    """The same range as times to fall to 1/e."""
    if not 0 < ends["least"] <= ends["largest"] < 1:
        return ""
    fast, slow = (format_quantity(-probed.period / math.log(ends[end]), probed.study.time_unit)
                  for end in ("least", "largest"))  # fmt: skip
    return f", falling to 1/e in {fast if fast == slow else f'{fast} to {slow}'}"


def _close_to_one(size: float) -> str:
    """|z| with as many digits as tell it from 1."""
    gap = abs(1 - size)
    if not math.isfinite(gap):
        return "unknown"
    return f"{size:.4g}" if gap == 0 or gap > 1e-3 else f"{size:.{min(15, 3 - math.floor(math.log10(gap)))}g}"


def _complex(real: float, imaginary: float) -> str:
    return f"{real:.5g}" if imaginary == 0 else f"{real:.5g} ± {imaginary:.5g}j"


def _pole_facts(probed: Probed) -> list[dict[str, Any]]:
    """The nominal plant's poles, the slowest first; what rounding left of an imaginary part is taken off."""
    found = []
    known = ~np.isnan(probed.dataset["pole"].values[0])
    for z, s in zip(probed.dataset["pole"].values[0][known], probed.dataset["pole_s"].values[0][known], strict=True):
        imaginary = 0.0 if abs(z.imag) <= 1e-12 * abs(z) else float(z.imag)
        damping = float(-s.real / abs(s)) if abs(s) else 0.0
        found.append({"z": [float(z.real), imaginary], "s": [float(s.real), float(s.imag)],
                      "natural_frequency": float(abs(s)), "damping_ratio": damping})  # fmt: skip
    return found


def _ends(values: Floats) -> dict[str, float]:
    known = values[~np.isnan(values)]
    return {"least": float(known.min(initial=np.inf)), "largest": float(known.max(initial=-np.inf))}


def _nominal_and_worst(row: Row) -> dict[str, float]:
    return {"nominal": row.nominal, "worst": row.worst_value}


def _measure_facts(probed: Probed, row: Row) -> dict[str, Any]:
    return {"name": row.name, "measure": row.kind, "unit": row.unit, **_nominal_and_worst(row),
            "worst_scenario": row.worst, "unknown_in": int(probed.unknown_in(row).sum())}  # fmt: skip


def _requirement_facts(probed: Probed, row: Row) -> dict[str, Any]:
    one = row.requirement
    assert one is not None and one.name == row.name
    limit = float(one.limits(np.array([probed.period]))[0])
    return _measure_facts(probed, row) | {
        "sense": one.sense, "limit": limit, "slack": row.worst_slack,
        "missed_by": int(probed.missed_by(row).sum()),
    }  # fmt: skip


def _wrapped(text: str, indent: int = 0) -> list[str]:
    return textwrap.wrap(text, _WIDTH, subsequent_indent=" " * indent, drop_whitespace=True)
