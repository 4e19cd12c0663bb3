"""Component cards and model figures as text."""

from __future__ import annotations

from typing import Any

import numpy as np
import pytest

import drumlin
from drumlin.reporting.cards import card_label, cards_text, figures_text, range_text


@pytest.fixture(scope="module")
def model() -> drumlin.Model:
    random = np.random.default_rng(1)
    rows = np.vstack(
        [random.normal([30.0, 2.0], [3.0, 0.2], (600, 2)), random.normal([60.0, 9.0], [5.0, 1.0], (300, 2))]
    )
    return drumlin.fit(rows, 2, seed=1, progress=False)


def test_every_component_has_a_line_with_its_share_and_ranges(model: drumlin.Model) -> None:
    lines = cards_text(model).splitlines()
    assert "central 80 %" in lines[0]
    assert lines[1].split() == ["id", "share", "rows", "x0", "x1"]
    first, second = lines[2].split(), lines[3].split()
    assert first[:4] == ["0", "66.7", "%", "600"] and second[:4] == ["1", "33.3", "%", "300"]
    assert all(len(line) <= 120 for line in lines)


def test_what_sets_components_apart_is_told_in_words(model: drumlin.Model) -> None:
    text = cards_text(model)
    assert "below average: " in text and "above average: " in text
    assert "most like 1" in text and "most like 0" in text


def test_names_go_with_the_cards(model: drumlin.Model) -> None:
    named = model.with_names({0: "boxes", 1: "crates"})
    text = cards_text(named)
    assert "name" in text.splitlines()[1] and "most like 1 crates" in text
    assert "name" not in cards_text(model).splitlines()[1].split()


def test_most_limits_the_cards(model: drumlin.Model) -> None:
    assert cards_text(model, most=1).endswith("... and 1 more component")


def test_one_component_stands_alone() -> None:
    alone = drumlin.fit(np.random.default_rng(1).normal(size=(200, 2)), 1, progress=False)
    text = cards_text(alone)
    assert "near average in every column" in text and "most like" not in text
    assert "100.0 %" in text
    assert figures_text(alone).startswith("1 component in 2 columns, structure full; fitted to 200 rows\n")


def test_figures_name_the_checksum_and_the_weights() -> None:
    import pyarrow as pa

    rows = np.random.default_rng(1).normal(size=200)
    model = drumlin.fit(
        pa.table({"x": rows, "count": np.full(200, 3)}), 1, columns=["x"], row_weight="count", progress=False
    )
    text = figures_text(model)
    assert model.checksum in text and "fitted to 200 rows that stand for 600" in text


@pytest.mark.parametrize(
    ("low", "high", "text"),
    [
        (21.234, 36.789, "21 to 37"),
        (0.6123, 1.2291, "0.61 to 1.23"),
        (1.50123, 1.8123, "1.50 to 1.81"),
        (-1234.5, 8765.4, "-1,234 to 8,765"),
        (1e9, 2e9, "1e+09 to 2e+09"),
        (1e-7, 3e-7, "1e-07 to 3e-07"),
        (5.0, 5.0, "5 to 5"),
        (1000000.1, 1000000.1004, "1,000,000.10000 to 1,000,000.10040"),
    ],
)
def test_ranges_have_the_digits_their_width_deserves(low: float, high: float, text: str) -> None:
    assert range_text(low, high) == text


def test_labels() -> None:
    card: dict[str, Any] = {"id": 3, "name": "long tubes"}
    assert card_label(card) == "3 long tubes"
    assert card_label({"id": 3, "name": None}) == "3"
