"""Made data/golden_format1.drumlin once, with the first version that wrote format 1. Not to be run again: the file is
the promise that every later version reads it."""

from pathlib import Path

import numpy as np
import pyarrow as pa

import drumlin

if __name__ == "__main__":
    random = np.random.default_rng(20)
    kind = random.choice(3, size=900, p=[0.55, 0.3, 0.15])
    centres, deviations = np.array([[30.0, 2.0], [120.0, 1.5], [40.0, 20.0]]), np.array([[5, 0.8], [15, 0.4], [8, 4]])
    rows = np.round(centres[kind] + deviations[kind] * random.standard_normal((900, 2)), 2)
    rows[::101, 1] = -9999.0
    table = pa.table({"length_cm": rows[:, 0], "weight_kg": rows[:, 1]})
    model = drumlin.fit(
        table,
        3,
        columns=["length_cm", "weight_kg"],
        missing="complete-rows",
        missing_codes={"weight_kg": [-9999.0]},
        seed=2,
        tries=4,
        progress=False,
    )
    model = model.with_names({0: "small boxes", 1: "long tubes"})
    model.save(Path(__file__).parent / "golden_format1.drumlin")
    print(model.checksum, model.log_density(centres).tolist())
    print(model)
