"""Instructions of a pass, counted and not timed: no kernel grows unseen, and trying to skip costs little.

Counts depend on the compiler, hardly on the machine. They are of one thread, over rows in memory, without their making.
"""

import functools

import pytest

import counting
from counting import KERNELS, Case
from drumlin import _core

SLACK = 0.03
DEARER = 0.05


@pytest.fixture(scope="module", autouse=True)
def example():
    if reason := counting.missing():
        pytest.skip(reason)
    if "avx2" not in _core.kernel_tiers():
        pytest.skip("this processor has no fused multiply-add: its counts are others than those recorded")
    counting.build()


@functools.cache
def count(case, tier="avx2"):
    return counting.count(case, tier)


@pytest.mark.parametrize("tier", counting.TIERS)
@pytest.mark.parametrize("kernel", KERNELS)
def test_kernels_do_not_grow(kernel, tier):
    record = counting.recorded(kernel, tier)
    if record["rustc"] != counting.compiler():
        pytest.skip(f"recorded with {record['rustc']}, this is {counting.compiler()}: make record-instructions")
    got, want = count(KERNELS[kernel][tier], tier), record["count"]
    change = got / want - 1.0
    assert abs(change) <= SLACK, (
        f"the {kernel} pass on tier {tier} takes {got} instructions, {change:+.1%} against {want} of {record['date']}. "
        "Look at what grew (callgrind_annotate; see DEVELOPERS.md). If it is meant, or if it shrank: "
        "make record-instructions, and say why in the commit"
    )


def test_counts_repeat():
    """Without this, a slack of 3 % would mean nothing."""
    case = Case(768, 5, 7, 1.0, "none")
    assert counting.count(case, "avx2") == counting.count(case, "avx2")


CASES = [
    # labels drawn at random, rows that lie everywhere: skipping is refused in every leaf
    (6144, 8, 16, 0.7, "wrong"),
    (3072, 16, 16, 0.7, "wrong"),
    (1536, 32, 32, 0.7, "wrong"),
    (1536, 64, 16, 0.7, "wrong"),
    # the border: labels are left, and skipping is refused or hardly pays
    (6144, 8, 16, 2.6, "left"),
    (6144, 16, 16, 2.0, "left"),
    (3072, 32, 32, 1.2, "left"),
]


@pytest.mark.parametrize(("rows", "columns", "components", "spacing", "hints"), CASES)
def test_trying_to_skip_is_never_dear(rows, columns, components, spacing, hints):
    """Whatever an earlier pass left: at most 5 % more than the dense kernels alone, chosen from counts of the leaf."""
    got = count(Case(rows, columns, components, spacing, hints))
    dense = count(Case(rows, columns, components, spacing, "dense"))
    assert got <= (1.0 + DEARER) * dense, f"{got} instructions, {got / dense - 1.0:+.1%} against {dense} when dense"
