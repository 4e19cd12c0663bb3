"""Passes: ours against scikit-learn's iteration and a large matrix product, after checking the answer."""

from __future__ import annotations

from cases import Case, check_answer, generate
from competitors import keep, ours, product, reference, statistics
from lines import Figure, Line
from turns import Settings, interleave

WARM = 2
"""Passes before anything is timed. The one that keeps the rows knows nothing of them; the next leaves hints of likely
components in each leaf; those after it skip what the hints allow. A fit pays this once."""


def flops(case: Case) -> int:
    """Useful floating-point operations of a pass: 2 N K d (d + 1), for diagonal covariances 8 N K d."""
    d = case["columns"]
    each = 8 * d if case["structure"] == "diagonal" else 2 * d * (d + 1)
    return int(case["rows"] * case["components"] * each)


def measure(case: Case, settings: Settings) -> Line:
    """Checks the answer against the stored one and the reference's own, then times the three in turn."""
    data = generate(case)
    sums = statistics(case, data)
    works = {
        "ours": ours(keep(data.rows, sums, settings.threads), sums, settings.threads),
        "reference": reference(case, data),
        "product": product(settings.size),
    }
    answers = {name: work() for name, work in works.items()}
    check_answer(case["name"], answers["ours"], case["log_likelihood"], "expected")
    check_answer(case["name"], answers["ours"], answers["reference"], "the reference's")
    for _ in range(WARM - 1):
        check_answer(case["name"], works["ours"](), answers["ours"], "that of the pass before")
    seconds = interleave(works, settings)
    rate = flops(case) / seconds["ours"]
    product_rate = 2 * settings.size**3 / seconds["product"]
    return Line(
        case["name"],
        Figure(seconds["reference"] / seconds["ours"], "times", case["required"], case["aim"]),
        Figure(rate / product_rate, "", case.get("share_required"), case.get("share_aim")),
        seconds["ours"],
        seconds["reference"],
        seconds["product"],
        rate / 1e9,
        log_likelihood=answers["ours"],
    )


def answer(case: Case) -> float:
    """The reference's log-likelihood per row, which `cases.toml` keeps."""
    return reference(case, generate(case))()
