"""Every error class has a case that reaches it through the public names, with its exit code and its built-in base."""

import inspect

import numpy as np
import pyarrow as pa
import pyarrow.parquet as pq
import pytest

import drumlin
from drumlin import errors

ROWS = np.random.default_rng(0).standard_normal((200, 2))


def schema(folder):
    drumlin.fit(pa.table({"a": ROWS[:, 0]}), 1, columns=["b"])


def data(folder):
    rows = ROWS.copy()
    rows[17, 1] = np.inf
    drumlin.fit(rows, 1)


def option(folder):
    drumlin.fit(ROWS, 1, structure="round")


def mixture(folder):
    drumlin.Mixture([0.5, 0.4], np.zeros((2, 1)), np.ones((2, 1, 1)), columns=["a"])


def stream(folder):
    table = pa.table({"a": ROWS[:, 0]})
    drumlin.fit(pa.RecordBatchReader.from_batches(table.schema, table.to_batches()), 2, columns=["a"])


def source(folder):
    (folder / "broken.parquet").write_bytes(b"PAR1 no such thing PAR1")
    drumlin.fit(str(folder / "broken.parquet"), 1, columns=["a"])


def target(folder):
    path = folder / "rows.parquet"
    pq.write_table(pa.table({"x0": ROWS[:, 0], "x1": ROWS[:, 1]}), path)
    model = drumlin.fit(ROWS, 1)
    (folder / "out.parquet").write_bytes(b"mine")
    drumlin.predict(str(path), model, str(folder / "out.parquet"))


def damaged(folder):
    drumlin.fit(ROWS, 1).save(folder / "model.drumlin")
    content = (folder / "model.drumlin").read_bytes()
    (folder / "model.drumlin").write_bytes(content[: len(content) // 2])
    drumlin.load(folder / "model.drumlin")


# class: what reaches it, exit code, built-in base
CASES = {
    "OptionError": (option, 2, ValueError),
    "SchemaError": (schema, 4, ValueError),
    "DataError": (data, 1, ValueError),
    "MixtureError": (mixture, 1, ValueError),
    "StreamError": (stream, 1, ValueError),
    "TargetError": (target, 1, OSError),
    "SourceError": (source, 1, OSError),
    "DamagedFileError": (damaged, 5, ValueError),
}
# A fault of drumlin itself: no public call may reach it. Its own test below is the only case.
UNREACHABLE = {"InternalError"}


def kinds() -> dict[str, type]:
    return {
        name: value
        for name, value in vars(errors).items()
        if inspect.isclass(value) and issubclass(value, errors.DrumlinError) and value is not errors.DrumlinError
    }


def test_every_kind_of_error_has_a_case():
    assert len(kinds()) >= 9
    assert set(kinds()) == set(CASES) | UNREACHABLE


@pytest.mark.parametrize("name", list(CASES))
def test_reached(name, tmp_path):
    cause, exit_code, base = CASES[name]
    with pytest.raises(errors.DrumlinError) as caught:
        cause(tmp_path)
    error = caught.value
    assert type(error) is getattr(drumlin, name)
    assert isinstance(error, base) and isinstance(error, drumlin.DrumlinError)
    assert error.exit_code == exit_code == type(error).exit_code
    message = str(error)
    assert len(message) > 20, message
    for leak in ("panicked", "unwrap", "Some(", "None", "Err(", "Error {", ".rs:"):
        assert leak not in message, message
    assert isinstance(error.facts, dict)
    if isinstance(error, OSError):
        assert str(tmp_path) in message or tmp_path.name in message


def test_internal_error_is_a_runtime_error():
    assert issubclass(drumlin.InternalError, RuntimeError) and drumlin.InternalError.exit_code == 1


def test_errors_survive_pickling(tmp_path):
    import pickle

    for name, (cause, _, _) in CASES.items():
        folder = tmp_path / name
        folder.mkdir()
        with pytest.raises(drumlin.DrumlinError) as caught:
            cause(folder)
        again = pickle.loads(pickle.dumps(caught.value))
        assert type(again) is type(caught.value) and str(again) == str(caught.value), name
