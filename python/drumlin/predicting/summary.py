"""What a prediction came to, counted while it runs."""

from __future__ import annotations

import dataclasses
from collections.abc import Sequence
from dataclasses import dataclass
from typing import Any

import numpy as np
import pyarrow as pa
import pyarrow.compute as pc


@dataclass(frozen=True)
class Summary:
    """What `drumlin.predict` wrote.

    `rows` written and `incomplete` of them (without a component, for gaps); `left_out` rows removed by `where`;
    `files` written; `seconds`; `shares`: by component id, the share of the complete rows whose likeliest component it
    is; `log_density`: mean over the complete rows, in nats (None without any).
    """

    rows: int
    incomplete: int
    left_out: int
    files: tuple[str, ...]
    seconds: float
    shares: dict[int, float]
    log_density: float | None

    def to_dict(self) -> dict[str, Any]:
        """Return the summary as JSON values."""
        found = dataclasses.asdict(self)
        return found | {"files": list(self.files), "shares": {str(one): self.shares[one] for one in self.shares}}

    def __str__(self) -> str:
        where = self.files[0] if len(self.files) == 1 else f"{len(self.files)} files"
        lines = [f"{self.rows:,} rows to {where} in {self.seconds:.1f} s"]
        if self.left_out:
            lines.append(f"  {self.left_out:,} rows left out by where")
        if self.incomplete:
            lines.append(f"  {self.incomplete:,} rows with gaps have no component")
        if self.log_density is not None:
            lines.append(f"  mean log density {self.log_density:.4g} nats")
        shares = list(self.shares.items())
        told = ", ".join(f"{one}: {100.0 * share:.1f}%" for one, share in shares[:12])
        lines.append(f"  components {told}" + (f" and {len(shares) - 12} more" if len(shares) > 12 else ""))
        return "\n".join(lines)


class Tally:
    """Counts results batch by batch."""

    def __init__(self, ids: Sequence[int], added: int) -> None:
        self._order = np.argsort(np.asarray(ids))
        self._sorted = np.asarray(ids)[self._order]
        self._ids = list(ids)
        self._added = added
        self._counts = np.zeros(len(self._ids), dtype=np.int64)
        self._density = 0.0
        self.rows = self.incomplete = self.read = 0

    def add(self, read: int, batch: pa.RecordBatch) -> None:
        """Take a batch of results; its added columns start with component, responsibility, runner_up, log_density."""
        component, density = batch.column(self._added), batch.column(self._added + 3)
        self.read += read
        self.rows += batch.num_rows
        self.incomplete += component.null_count
        found = component.drop_null().to_numpy()
        places = self._order[np.searchsorted(self._sorted, found)]
        self._counts += np.bincount(places, minlength=len(self._ids))
        if len(found):
            self._density += float(pc.sum(density).as_py())

    def summary(self, files: Sequence[str], seconds: float) -> Summary:
        """Return what was counted."""
        complete = self.rows - self.incomplete
        shares = {int(one): float(n) / max(complete, 1) for one, n in zip(self._ids, self._counts, strict=True)}
        return Summary(
            rows=self.rows,
            incomplete=self.incomplete,
            left_out=self.read - self.rows,
            files=tuple(files),
            seconds=round(seconds, 3),
            shares=shares,
            log_density=self._density / complete if complete else None,
        )
