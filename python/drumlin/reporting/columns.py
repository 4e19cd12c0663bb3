"""The columns of a table as text: one line per column, a sentence each."""

from __future__ import annotations

import html
from typing import TYPE_CHECKING

if TYPE_CHECKING:
    from drumlin.judging.profile import ColumnProfile, Profile

__all__ = ["profile_html", "profile_text", "short_findings", "suggestion_text"]

HARMFUL = 10.0
"""From this effect on a column would harm a fit as it is."""
HEADINGS = ("column", "type", "gaps", "least", "1 %", "median", "99 %", "most")

FINDING = "what it means for a fit"


def profile_text(profile: Profile) -> str:
    """Return the whole profile: a table ordered by effect on a fit, notes, and the line to paste."""
    cells = [[*HEADINGS, FINDING], *(_cells(one) for one in profile.columns)]
    widths = [max(len(line[place]) for line in cells) for place in range(len(HEADINGS))]
    lines = [headline(profile), ""]
    for line in cells:
        left = [line[place].ljust(widths[place]) for place in (0, 1)]
        right = [line[place].rjust(widths[place]) for place in range(2, len(HEADINGS))]
        lines.append("  ".join([*left, *right, line[-1]]).rstrip())
    lines += ["", *(f"note: {note}" for note in profile.notes), suggestion_text(profile)]
    return "\n".join(lines)


def profile_html(profile: Profile) -> str:
    """Return the profile as a table for a notebook; names and values are escaped."""
    cells = [_cells(one) for one in profile.columns]
    head = "".join(f"<th>{html.escape(text)}</th>" for text in [*HEADINGS, FINDING])
    body = "".join(f"<tr>{''.join(f'<td>{html.escape(text)}</td>' for text in line)}</tr>" for line in cells)
    notes = "".join(f"<p>note: {html.escape(note)}</p>" for note in profile.notes)
    return (
        f"<table><caption>{html.escape(headline(profile))}</caption><thead><tr>{head}</tr></thead>"
        f"<tbody>{body}</tbody></table>{notes}<pre>{html.escape(suggestion_text(profile))}</pre>"
    )


def headline(profile: Profile) -> str:
    """Return what was read: "2,000,000 rows, 10 columns: scans (7 files)"."""
    kept = f", {profile.kept:,} kept by where" if profile.kept != profile.rows else ""
    looked = "" if profile.sampled >= profile.kept else f"; quantiles from {profile.sampled:,} sampled rows"
    return f"{profile.label}: {profile.rows:,} rows{kept}, {len(profile.columns)} columns{looked}"


def suggestion_text(profile: Profile) -> str:
    """Return the options to paste into `fit`, in Python and for the command line."""
    if not profile.suggested_columns:
        return "No column is fit to be fitted as it is."
    lines = []
    if profile.suggested_missing:
        lines.append(f"{_share(profile.complete_share)} of the rows are complete in the columns suggested:")
    return "\n".join([*lines, f"  {profile.options_line}", f"  {profile.flags_line}"])


def short_findings(profile: Profile) -> list[tuple[str, str]]:
    """Return name and sentence of the columns that would harm a fit, gravest first."""
    return [(one.name, one.finding) for one in profile.columns if one.finding and one.effect >= HARMFUL]


def _share(share: float) -> str:
    return "All" if share == 1.0 else f"{min(100.0 * share, 99.99):.4g} %"


def _cells(one: ColumnProfile) -> list[str]:
    numbers = [one.least, *(one.quantiles.get(level) for level in ("0.01", "0.5", "0.99")), one.most]
    gaps = one.gaps + one.infinite
    shown = ["" if value is None else f"{value:.5g}" for value in numbers]
    return [one.name, one.type, f"{gaps:,}" if gaps else "", *shown, one.finding]
