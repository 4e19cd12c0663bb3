"""What a column means for a fit, in one sentence, and whether to suggest it."""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import dataclass, field
from typing import TYPE_CHECKING

import numpy as np

from drumlin.judging.codes import SuspectedCode

if TYPE_CHECKING:
    import pyarrow as pa

__all__ = ["Facts", "Finding", "finding"]

FEW = 5
"""At most so many distinct values make a label rather than a measurement."""
ATOM = 0.1
"""From this share on, one repeated value is worth a sentence."""
MOSTLY = 0.5
"""From this share on, one repeated value or gaps keep a column out of the suggestion."""
LEAST_FOR_ID = 20
"""Fewer distinct whole numbers may differ by chance."""


@dataclass(frozen=True)
class Facts:
    """What is known about a column: counts over all rows, the rest from the sample; see `ColumnProfile`."""

    name: str
    type: pa.DataType
    rows: int
    gaps: int
    infinite: int = 0
    present: int = 0
    constant: bool = False
    least: float = 0.0
    codes: tuple[SuspectedCode, ...] = ()
    copy_of: str | None = None
    sampled: int = 0
    distinct: int = 0
    integers: bool = False
    repeated: tuple[tuple[float, float], ...] = ()
    quantiles: Mapping[str, float] = field(default_factory=dict)
    part: str | None = None

    @property
    def id_like(self) -> bool:
        """Whole numbers that never repeat in the sample."""
        return self.integers and self.sampled >= LEAST_FOR_ID and self.distinct >= self.sampled


@dataclass(frozen=True)
class Finding:
    """A sentence, whether the column is suggested for a fit, and how much it would matter there (0 to 100)."""

    sentence: str
    suggested: bool
    effect: float


PARTS = {
    "key": "Named as key: carried along, never fitted.",
    "row weight": "Named as row weight: says how many rows a row stands for, never fitted.",
    "partition": "Comes from the paths of the files, not from the readings: left out.",
    "written": "Written by an earlier predict: left out.",
}


def finding(facts: Facts) -> Finding:
    """Judge a column by the gravest thing that is known about it."""
    import pyarrow as pa

    from drumlin.tables.numeric import is_feature

    if facts.part is not None:
        return Finding(PARTS[facts.part], False, 2.0)
    if not is_feature(facts.type):
        return Finding(_not_a_number(facts.type), False, 1.0)
    if facts.rows == 0:
        return Finding("No rows.", False, 1.0)
    if facts.present == 0:
        return Finding("Holds no finite value at all: left out.", False, 90.0)
    if pa.types.is_boolean(facts.type):
        return Finding("True or false: left out; use it in where, or carry it along.", False, 3.0)
    if facts.infinite:
        word = facts.name if facts.name.isidentifier() else f"`{facts.name}`"
        text = f'{rows_are(facts.infinite)} infinite. Left out until where="abs({word}) < 1e300" drops them.'
        return Finding(text, False, 88.0)
    for judge in (_codes, _gaps, _identifier, _copy, _constant, _float32, _few, _atom):
        found = judge(facts)
        if found is not None:
            return found
    return Finding("", True, 5.0)


def rows_are(count: int, about: bool = False) -> str:
    """Return "1 row is" or "2,000 rows are".

    >>> rows_are(1), rows_are(2000, about=True)
    ('1 row is', 'about 2,000 rows are')
    """
    text = "1 row is" if count == 1 else f"{count:,} rows are"
    return f"about {text}" if about else text


def percent(share: float) -> str:
    """Return a share as a percentage with two significant digits, never rounded up to 100 %."""
    if 0.99 < share < 1.0:
        return "more than 99 %"
    return f"{100 * share:.2g} %" if share < 0.1 else f"{100 * share:.0f} %"


def shown(value: float) -> str:
    """Return a short number, whole ones in full."""
    return f"{int(value)}" if value == int(value) and abs(value) < 1e10 else f"{value:.6g}"


def _codes(facts: Facts) -> Finding | None:
    if not facts.codes:
        return None
    told = [
        f"{rows_are(code.count, not code.exact)} exactly {shown(code.value)}, {code.spreads:,.0f} spreads from the rest"
        for code in facts.codes
    ]
    sentence = "; ".join(told)
    kept = facts.gaps < MOSTLY * facts.rows
    if facts.gaps:
        sentence += f"; {percent(facts.gaps / facts.rows)} of rows have gaps"
    return Finding(f"{_capital(sentence)}: probably a code for a gap.", kept, 80.0)


def _gaps(facts: Facts) -> Finding | None:
    share = facts.gaps / facts.rows
    if facts.gaps == 0:
        return None
    if share >= MOSTLY:
        return Finding(
            f"{_capital(percent(share))} of rows have gaps: left out, for too few rows would remain.", False, 70.0
        )
    found = next((one for judge in (_identifier, _copy, _constant, _few, _atom) if (one := judge(facts))), None)
    count = "1 row has a gap" if facts.gaps == 1 else f"{facts.gaps:,} rows have gaps"
    text = f"{_capital(count)} ({percent(share)})."
    if found is not None:
        return Finding(f"{text} {found.sentence}", found.suggested, max(found.effect, 40.0))
    return Finding(text, True, 40.0 + 20.0 * share)


def _identifier(facts: Facts) -> Finding | None:
    from drumlin.tables.numeric import suggest_columns

    if facts.id_like:
        return Finding("Whole numbers, every one different: an identifier. Use it as key.", False, 60.0)
    if not suggest_columns(_schema(facts)):
        return Finding(
            "Named like an identifier: left out. Use it as key, or name it in columns to fit it.", False, 58.0
        )
    return None


def _schema(facts: Facts) -> pa.Schema:
    import pyarrow as pa

    return pa.schema([(facts.name, facts.type)])


def _copy(facts: Facts) -> Finding | None:
    if facts.copy_of is None:
        return None
    return Finding(f"Nearly a copy of {facts.copy_of!r} (correlation above 0.9995): left out.", False, 55.0)


def _constant(facts: Facts) -> Finding | None:
    if not facts.constant:
        return None
    return Finding(f"Always {shown(facts.least)}: left out, for it cannot tell rows apart.", False, 50.0)


def _few(facts: Facts) -> Finding | None:
    if facts.distinct > FEW or facts.sampled < 4 * FEW:
        return None
    text = f"Only {facts.distinct} different values: a label or a count rather than a measurement. Left out."
    return Finding(text, False, 45.0)


def _atom(facts: Facts) -> Finding | None:
    if not facts.repeated or facts.repeated[0][1] < ATOM or facts.sampled < 4 * FEW:
        return None
    value, share = facts.repeated[0]
    if share >= MOSTLY:
        text = f"{percent(share)} of rows are exactly {shown(value)}: no component fits that. Left out."
        return Finding(_capital(text), False, 44.0)
    text = f"{percent(share)} of rows are exactly {shown(value)}: a component may settle on that value alone."
    return Finding(_capital(text), True, 30.0 + 10.0 * share)


def _float32(facts: Facts) -> Finding | None:
    """Warn where float32 cannot hold the differences that matter."""
    import pyarrow as pa

    if facts.type != pa.float32() or not facts.quantiles:
        return None
    width = (facts.quantiles["0.75"] - facts.quantiles["0.25"]) / 1.349
    step = float(np.spacing(np.float32(abs(facts.quantiles["0.5"]))))
    if 0 < width < 16 * step:
        text = f"float32 holds only steps of {step:.2g} here, next to a spread of {width:.2g}: store it as float64."
        return Finding(text, True, 35.0)
    return None


def _capital(text: str) -> str:
    return text[:1].upper() + text[1:]


def _not_a_number(type_: pa.DataType) -> str:
    import pyarrow as pa

    types = pa.types
    if types.is_temporal(type_):
        return "Dates or times: left out. Use it in where, or turn it into a number such as the hour of the day."
    if (
        types.is_dictionary(type_)
        or types.is_string(type_)
        or types.is_large_string(type_)
        or types.is_string_view(type_)
    ):
        return "Text: left out. Carry it along, use it as key or in where, or encode it as numbers yourself."
    if types.is_nested(type_):
        return "Lists or records: left out. Make a column of each number to fit them."
    if types.is_null(type_):
        return "Nothing but nulls: left out."
    return f"Type {type_} cannot be fitted: left out."
