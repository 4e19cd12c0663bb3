"""Lines of the table: figures, what is wanted of them, and the verdict."""

from __future__ import annotations

from dataclasses import dataclass


@dataclass(frozen=True)
class Figure:
    """A value and what is wanted of it. `bound`: "at least" or "at most"."""

    value: float
    unit: str = "times"
    required: float | None = None
    aim: float | None = None
    bound: str = "at least"

    def reaches(self, wanted: float) -> bool:
        """Whether the value is as good as `wanted`."""
        return self.value >= wanted if self.bound == "at least" else self.value <= wanted

    def verdict(self) -> str:
        """ "aim", "required", "below (what is required)", or "" where nothing is wanted."""
        if self.required is None:
            return ""
        if not self.reaches(self.required):
            return f"below ({self.required:g})"
        return "aim" if self.aim is not None and self.reaches(self.aim) else "required"

    def wanted(self) -> str:
        """Required and aim, as text."""
        if self.required is None:
            return ""
        sign = {"at least": "", "at most": "<= "}[self.bound]
        return f"{sign}{self.required:g}" + (f" / {self.aim:g}" if self.aim is not None else "")


@dataclass(frozen=True)
class Line:
    """One line: a figure, for passes also the share of the matrix product's rate, and what they were computed from."""

    name: str
    figure: Figure
    share: Figure | None = None
    seconds: float | None = None
    reference_seconds: float | None = None
    product_seconds: float | None = None
    gigaflops: float | None = None
    peak_mb: float | None = None
    log_likelihood: float | None = None

    def verdict(self) -> str:
        """The worse of the verdicts on the figure and on the share; both where both are below."""
        first, second = self.figure.verdict(), self.share.verdict() if self.share else ""
        below = [text for text in (first, second) if text.startswith("below")]
        if below:
            return " and ".join(below)
        return "required" if "required" in (first, second) else first or second

    def values(self) -> dict[str, object]:
        """The line as one row of a record."""
        share = self.share or Figure(float("nan"), "")
        return {
            "line": self.name,
            "figure": self.figure.value,
            "unit": self.figure.unit,
            "bound": self.figure.bound if self.figure.required is not None else "",
            "required": self.figure.required,
            "aim": self.figure.aim,
            "share_of_product": self.share.value if self.share else None,
            "share_required": share.required,
            "share_aim": share.aim,
            "verdict": self.verdict(),
            "seconds": self.seconds,
            "reference_seconds": self.reference_seconds,
            "product_seconds": self.product_seconds,
            "gigaflops": self.gigaflops,
            "peak_mb": self.peak_mb,
            "log_likelihood": self.log_likelihood,
        }


HEAD = (
    f"{'':36} {'ours s':>9} {'sklearn s':>9} {'product s':>9}  {'figure':>8} {'unit':8} {'wanted':13}"
    f" {'share':>5} {'wanted':11} {'GF/s':>6} {'peak MB':>7}  verdict"
)


def text(line: Line) -> str:
    """The line in the columns of `HEAD`."""

    def number(value: float | None, width: int, form: str) -> str:
        return " " * width if value is None else f"{value:{width}{form}}"

    share = line.share
    return (
        f"{line.name:36} {number(line.seconds, 9, '.4g')} {number(line.reference_seconds, 9, '.4g')} "
        f"{number(line.product_seconds, 9, '.4g')}  {line.figure.value:8.4g} {line.figure.unit:8} "
        f"{line.figure.wanted():13} {number(share.value if share else None, 5, '.2f')} "
        f"{share.wanted() if share else '':11} {number(line.gigaflops, 6, '.1f')} {number(line.peak_mb, 7, '.0f')}  "
        f"{line.verdict()}"
    )
