"""Component cards: each component explained to people who do not know what a covariance is."""

from __future__ import annotations

from collections.abc import Mapping, Sequence
from typing import TYPE_CHECKING, Any

if TYPE_CHECKING:
    from drumlin.model import Model

__all__ = ["cards_text", "figures_text"]

CENTRAL = "central 80 %"


def cards_text(model: Model, *, most: int | None = None) -> str:
    """Return the cards of a model as text, largest component first.

    A card tells the share and the number of rows, the range per column that holds the central 80 % of the component's
    rows, the columns that set it apart from the table as a whole, and the component most like it. `most` limits the
    number of cards.
    """
    cards = model.cards()
    shown = cards if most is None else cards[:most]
    if not shown:
        return ""
    columns = [one["column"] for one in shown[0]["ranges"]]
    headings = ["id", "name", "share", "rows", *columns]
    body = [_cells(card) for card in shown]
    named = any(card.get("name") for card in shown)
    keep = [place for place, heading in enumerate(headings) if heading != "name" or named]
    widths = {place: max(len(line[place]) for line in [headings, *body]) for place in keep}
    lines = [f"Typical range per column ({CENTRAL} of a component's rows):"]
    for line in [headings, *body]:
        cells = [line[place].ljust(widths[place]) if place == 1 else line[place].rjust(widths[place]) for place in keep]
        lines.append("  " + "  ".join(cells).rstrip())
    lines += ["", "What sets each apart:"]
    labels = [card_label(card) for card in shown]
    width = max(map(len, labels))
    lines += [f"  {label.ljust(width)}  {_apart(card, cards)}" for label, card in zip(labels, shown, strict=True)]
    if len(shown) < len(cards):
        left = len(cards) - len(shown)
        lines.append(f"  ... and {left} more component{'' if left == 1 else 's'}")
    return "\n".join(lines)


def figures_text(model: Model) -> str:
    """Return the figures of a fit: rows, passes, why it stopped, log-likelihood per row, BIC, checksum."""
    mixture = model.mixture
    components = "1 component" if mixture.components == 1 else f"{mixture.components} components"
    columns = "1 column" if mixture.dimensions == 1 else f"{mixture.dimensions} columns"
    shape = f"structure {mixture.structure}" + (", pooled" if mixture.pooled else "")
    passes = "1 pass" if model.passes == 1 else f"{model.passes} passes"
    per_row = model.log_likelihood / model.weight if model.weight else float("nan")
    held = model.held_log_likelihood
    judged = f", {held:.4f} in rows held out" if held is not None else ""
    stand = "" if model.weight == model.rows else f" that stand for {model.weight:,.6g}"
    return "\n".join(
        [
            f"{components} in {columns}, {shape}; fitted to {model.rows:,} rows{stand}",
            f"{passes}, stopped: {model.stopped}; {per_row:.4f} nats per row{judged}; BIC {model.bic:,.0f}",
            f"checksum {model.checksum}",
        ]
    )


def card_label(card: Mapping[str, Any]) -> str:
    """Return "3 long tubes", or "3" for a component without a name."""
    return f"{card['id']} {card['name']}" if card.get("name") else str(card["id"])


def range_text(low: float, high: float) -> str:
    """Return a range with as many digits as its width deserves.

    >>> range_text(21.234, 36.789), range_text(0.6123, 1.2291)
    ('21 to 37', '0.61 to 1.23')
    """
    import math

    width = abs(high - low)
    size = max(abs(low), abs(high))
    if not width > 0.0 or size >= 1e7 or size < 1e-4:
        return f"{low:.4g} to {high:.4g}"
    decimals = min(max(1 - math.floor(math.log10(width)), 0), 12)
    return f"{low:,.{decimals}f} to {high:,.{decimals}f}"


def _cells(card: Mapping[str, Any]) -> list[str]:
    share = 100.0 * card["share"]
    return [
        str(card["id"]),
        card.get("name") or "",
        f"{share:.1f} %" if share >= 0.1 else f"{share:.2g} %",
        f"{card['rows']:,.0f}",
        *(range_text(one["low"], one["high"]) for one in card["ranges"]),
    ]


def _apart(card: Mapping[str, Any], cards: Sequence[Mapping[str, Any]]) -> str:
    """Tell what sets a component apart, and which other is most like it."""
    parts = []
    for heading, sign in (("above average", 1.0), ("below average", -1.0)):
        told = [_degree(one) for one in card["apart"] if one["difference"] * sign > 0]
        if told:
            parts.append(f"{heading}: {', '.join(told)}")
    text = "; ".join(parts) or "near average in every column"
    nearest = card.get("nearest")
    if nearest is None or len(cards) < 2:
        return text
    other = next((one for one in cards if one["id"] == nearest["id"]), None)
    return f"{text}; most like {card_label(other) if other is not None else nearest['id']}"


def _degree(apart: Mapping[str, Any]) -> str:
    """Put a difference from the average, in standard deviations of the whole table, into words."""
    size = abs(apart["difference"])
    degree = " (far)" if size >= 2.0 else "" if size >= 1.0 else " (somewhat)"
    return f"{apart['column']}{degree}"
