"""What the reader of a model should know, in sentences."""

from __future__ import annotations

from collections.abc import Mapping, Sequence
from typing import TYPE_CHECKING, Any

import numpy as np
from numpy.typing import NDArray

from drumlin.describe import counted, number
from drumlin.fitting.first_pass import FirstPass, gaps_in_words

if TYPE_CHECKING:
    import pyarrow as pa

    from drumlin import _core
    from drumlin.fitting.em import Passes

MOST_WORK = 2e8
"""Components times columns cubed up to which the directions of all covariances are looked at."""
FLOAT32_DIGITS = 2.0**-23
MOST_NAMED = 5


def row_notes(found: FirstPass, columns: Sequence[str]) -> list[str]:
    """Say which rows were left out."""
    summary, notes = found.summary, []
    if int(summary["incomplete"]):
        left, kept = int(summary["incomplete"]), int(summary["kept"])
        notes.append(
            f"{left:,} of {counted(kept, 'row')} were left out because of gaps: {gaps_in_words(summary, columns)}."
        )
    if int(summary["zero_weights"]):
        notes.append(f"{counted(int(summary['zero_weights']), 'row')} with row weight 0 were left out.")
    return notes


def column_notes(
    found: FirstPass, columns: Sequence[str], schema: pa.Schema, codes: Mapping[str, tuple[float, ...]]
) -> list[str]:
    """Say which columns look odd: constant, holding a code for gaps, numbering the rows, too coarse for float32."""
    summary, notes = found.summary, []
    for position, name in enumerate(columns):
        least, most = float(summary["least"][position]), float(summary["most"][position])
        kind = schema.field(name).type
        if least == most:
            notes.append(
                f"Column {name!r} is constant ({number(least)}): it tells no component from another and could be left "
                "out."
            )
            continue
        notes += _code_notes(found, position, name)
        rows = int(summary["kept"])
        if rows > 100 and _is_integer(kind) and most - least == rows - 1 == int(summary["present"][position]) - 1:
            notes.append(
                f"Column {name!r} runs from {number(least)} to {number(most)} in {rows:,} rows, like a row number or "
                "an id: probably leave it out of columns."
            )
        size = max(abs(least), abs(most))
        if str(kind) == "float" and size * FLOAT32_DIGITS > 0.01 * float(found.scaling.spread[position]):
            notes.append(
                f"Column {name!r} is float32 and far from 0 for its spread: steps of {number(size * FLOAT32_DIGITS)} "
                "blur its variance. Store it as float64, or take an offset off."
            )
    return notes


def _code_notes(found: FirstPass, position: int, name: str) -> list[str]:
    from drumlin.judging.codes import Extreme, suspected_codes

    summary = found.summary
    least = Extreme(float(summary["least"][position]), int(summary["least_count"][position]))
    most = Extreme(float(summary["most"][position]), int(summary["most_count"][position]))
    present = int(summary["present"][position])
    return [
        f"{'' if code.exact else 'About '}{100.0 * code.count / present:.2g} % of {name!r} is exactly "
        f"{number(code.value)}, {code.spreads:,.0f} spreads from the rest. If it stands for a gap: "
        f"missing_codes={{{name!r}: [{code.value:g}]}}."
        for code in suspected_codes(found.values[:, position], least, most, present)
    ]


def _is_integer(kind: Any) -> bool:
    import pyarrow.types

    return bool(pyarrow.types.is_integer(kind))


def too_wide(found: FirstPass, columns: Sequence[str]) -> list[str]:
    """Say which columns have values that float32 cannot hold beside the rest."""
    from drumlin import _core

    notes = []
    for position, name in enumerate(columns):
        centre, spread = float(found.scaling.centre[position]), float(found.scaling.spread[position])
        ends = [float(found.summary[end][position]) for end in ("least", "most")]
        if any(abs(end - centre) > _core.SINGLE_RANGE * spread for end in ends):
            notes.append(
                f"precision='single' was not used: column {name!r} has values {_core.SINGLE_RANGE:g} spreads from its "
                "centre."
            )
    return notes


def obstacle_notes(passes: Passes, ids: Sequence[int] | None) -> list[str]:
    """Say from which pass on, and because of which component, float32 was given up."""
    if passes.obstacle is None:
        return []
    at, position, reach = passes.obstacle
    who = "a component" if ids is None else f"component {ids[position]}"
    return [
        f"precision='single' was given up from pass {at} on: {who} is so thin, or so far from the centre for its size "
        f"(it reaches {reach:,.0f} of its standard deviations), that float32 would blur its covariance."
    ]


def tries_note(levels: Sequence[float]) -> str:
    """Say how far the tries agree; `levels` are their log-likelihoods per row of the sample."""
    best = max(levels)
    close = sum(best - level <= 0.001 for level in levels)
    text = f"{len(levels)} tries on the sample: {close} within 0.001 nats per row of the best"
    if close < len(levels):
        text += f", the others up to {number(best - min(levels))} below"
    if close == 1 and len(levels) > 2:
        text += "; no two agree, so more tries may find better"
    return text + "."


def event_notes(passes: Passes, ids: Sequence[int] | None) -> list[str]:
    """Tell repairs; `ids` are those of the mixture started from, None when components had no number yet."""
    notes = []
    for at, position, what in passes.events[:MOST_NAMED]:
        who = "A component" if ids is None or position < 0 else f"Component {ids[position]}"
        notes.append(f"{who} {what} (pass {at})." if position >= 0 else f"{what} (pass {at}).")
    if len(passes.events) > MOST_NAMED:
        notes.append(f"{len(passes.events) - MOST_NAMED} more repairs of this sort.")
    return notes


def stopped_in_words(stopped: str, trace: Sequence[Mapping[str, Any]], tolerance: float) -> str:
    """Say what the end of the passes means for the result."""
    last = trace[-1]
    remaining, moving, count = last["remaining"], int(last["moving"]), counted(len(trace), "pass")
    still = "no component still moves" if moving == 0 else f"{counted(moving, 'component')} still move"
    if stopped == "tolerance":
        return f"Stopped after {count}: at most about {number(remaining)} nats per row are still to be gained, {still}."
    gain = "an unknown gain is" if remaining is None else f"about {number(remaining)} nats per row are"
    if stopped == "interrupt":
        blurred = " The log-likelihood is one of float32." if last["precision"] == "single" else ""
        return (
            f"Interrupted after {count}: {gain} still to be gained, and {still}. This is the best mixture whose "
            f"log-likelihood is known.{blurred} For more, fit again with components=model."
        )
    text = f"Stopped at the limit of {count}: {gain} still to be gained, and {still}."
    if tolerance == 0.0:
        return text
    return f"{text} The model can be used; for more, fit again with components=model or a higher pass_limit."


def direction_notes(
    mixture: _core.Mixture, ids: Sequence[int], scaling: _core.Scaling, columns: Sequence[str], floor: float
) -> list[str]:
    """Say which components are held up by the floor, or have columns that all but determine each other."""
    thin = _thin_directions(mixture, scaling, floor)
    groups: dict[tuple[bool, tuple[int, ...]], list[int]] = {}
    for position, held, involved in thin:
        groups.setdefault((held, involved), []).append(position)
    notes = []
    for (held, involved), positions in list(groups.items())[:MOST_NAMED]:
        named = " and ".join(repr(columns[at]) for at in involved)
        who = "The pooled covariance" if mixture.pooled else _components_in_words([ids[at] for at in positions])
        several = len(positions) > 1 and not mixture.pooled
        if held:
            verb = "are" if several else "is"
            where = f"of {named}" if len(involved) == 1 else f"that mixes {named}"
            notes.append(f"{who} {verb} held up by floor={floor:g} in the direction {where}.")
        else:
            verb = "have" if several else "has"
            notes.append(f"{who} {verb} {named} all but determining each other; one of them could be left out.")
    if len(groups) > MOST_NAMED:
        notes.append(f"{len(groups) - MOST_NAMED} more directions are as thin.")
    return notes


def _components_in_words(ids: Sequence[int]) -> str:
    if len(ids) == 1:
        return f"Component {ids[0]}"
    shown = ", ".join(map(str, ids[:8])) + (", ..." if len(ids) > 8 else "")
    return f"{len(ids)} components ({shown})"


def _thin_directions(
    mixture: _core.Mixture, scaling: _core.Scaling, floor: float
) -> list[tuple[int, bool, tuple[int, ...]]]:
    """The components with a direction at the floor (True) or all but flat (False), and the columns it involves."""
    stored, spread = mixture.stored, scaling.spread
    limit = floor * 1.001
    if mixture.structure == "spherical":
        variances = stored[:, None] / spread**2
        low = np.flatnonzero(variances.min(axis=1) <= limit)
        return [(int(k), True, (int(variances[k].argmin()),)) for k in low]
    if mixture.structure == "diagonal":
        variances = stored / spread**2
        return [
            (int(k), True, tuple(int(at) for at in np.flatnonzero(variances[k] <= limit)[:4]))
            for k in np.flatnonzero(variances.min(axis=1) <= limit)
        ]
    if len(stored) * float(mixture.dimensions) ** 3 > MOST_WORK:
        return []
    found = []
    scaled = stored / spread[:, None] / spread[None, :]
    least, directions = _least_direction(scaled)
    deviations = np.sqrt(np.diagonal(scaled, axis1=1, axis2=2))
    flat, flat_directions = _least_direction(scaled / deviations[:, :, None] / deviations[:, None, :])
    for k in range(len(stored)):
        held = bool(least[k] <= limit)
        if held or flat[k] <= 1e-6:
            direction = np.abs(directions[k] if held else flat_directions[k])
            involved = np.flatnonzero(direction >= 0.3 * direction.max())[:4]
            found.append((k, held, tuple(int(at) for at in involved)))
    return found


def _least_direction(matrices: NDArray[np.float64]) -> tuple[NDArray[np.float64], NDArray[np.float64]]:
    values, vectors = np.linalg.eigh(matrices)
    return values[:, 0], vectors[:, :, 0]
