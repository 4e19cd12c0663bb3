"""The row-wise methods: every way of giving rows has the same bits; gaps, codes and rows out of reach stay in place."""

import numpy as np
import pyarrow as pa
import pytest

import drumlin

METHODS = ("log_density", "assign", "responsibilities", "distance")


def mixture_of_normals(components, columns, seed=0):
    """Narrow components, so that far rows are beyond every density."""
    random = np.random.default_rng(seed)
    factors = 0.1 * (np.eye(columns) + 0.2 * random.normal(size=(components, columns, columns)))
    weights = random.uniform(0.5, 1.0, components)
    return drumlin.Mixture(
        weights / weights.sum(),
        random.normal(size=(components, columns)),
        factors @ factors.transpose(0, 2, 1),
        [f"x{j}" for j in range(columns)],
        ids=[3 * number + 1 for number in range(components)][::-1],
    )


def rows_of(count, columns, seed=1):
    rows = np.random.default_rng(seed).normal(size=(count, columns))
    rows[::37] *= 1e180
    rows[5::41, columns // 2] = np.nan
    return rows


def row_by_row(mixture, rows, method):
    return np.concatenate([getattr(mixture, method)(row[None, :].copy()) for row in rows])


@pytest.mark.parametrize(("components", "columns"), [(1, 1), (1, 8), (4, 3), (16, 8), (5, 11)])
@pytest.mark.parametrize("method", METHODS)
def test_many_rows_at_once_have_the_bits_of_each_row_alone(components, columns, method):
    mixture, rows = mixture_of_normals(components, columns), rows_of(409, columns)
    got = getattr(mixture, method)(rows)
    np.testing.assert_array_equal(got, row_by_row(mixture, rows, method))
    gaps = np.isnan(rows).any(axis=1)
    assert 5 < gaps.sum() < 15
    assert np.array_equal(got == -1 if method == "assign" else np.isnan(got.reshape(len(rows), -1)[:, 0]), gaps)


def views(rows):
    """Arrays that hold the same numbers in other places."""
    count, columns = rows.shape
    wide = np.full((count, columns + 3), 7.0, rows.dtype)
    wide[:, 1 : columns + 1] = rows
    sparse = np.full((2 * count, 2 * columns), 7.0, rows.dtype)
    sparse[::2, ::2] = rows
    unaligned = np.frombuffer(b"\0" + rows.tobytes(), np.uint8)[1:].view(rows.dtype).reshape(rows.shape)
    return {
        "row after row": np.ascontiguousarray(rows),
        "column after column": np.asfortranarray(rows),
        "some columns of a wider array": wide[:, 1 : columns + 1],
        "some columns of a wider array by columns": np.asfortranarray(wide)[:, 1 : columns + 1],
        "every second": sparse[::2, ::2],
        "rows reversed": np.ascontiguousarray(rows[::-1])[::-1],
        "columns reversed": np.ascontiguousarray(rows[:, ::-1])[:, ::-1],
        "both reversed": np.asfortranarray(rows[::-1, ::-1])[::-1, ::-1],
        "read only": np.frombuffer(rows.tobytes(), rows.dtype).reshape(rows.shape),
        "unaligned": unaligned,
        "other byte order": rows.astype(rows.dtype.newbyteorder()),
    }


@pytest.mark.parametrize("columns", [1, 5, 8])
@pytest.mark.parametrize("kind", [np.float64, np.float32])
@pytest.mark.parametrize("method", METHODS)
def test_strides_do_not_matter(columns, kind, method):
    mixture = mixture_of_normals(3, columns)
    with np.errstate(over="ignore"):
        rows = np.clip(rows_of(20_000, columns), -1e30, 1e30).astype(kind)
    want = getattr(mixture, method)(rows.astype(np.float64))
    for name, view in views(rows).items():
        np.testing.assert_array_equal(view, rows)
        got = getattr(mixture, method)(view)
        assert got.dtype == want.dtype and got.flags.c_contiguous, name
        np.testing.assert_array_equal(got, want, err_msg=name)


def test_the_same_row_everywhere():
    mixture, row = mixture_of_normals(4, 3), np.array([0.3, -0.2, 1.1])
    rows = np.broadcast_to(row, (1_000, 3))
    assert rows.strides[0] == 0
    for method in METHODS:
        one = getattr(mixture, method)(row[None, :])
        np.testing.assert_array_equal(getattr(mixture, method)(rows), np.repeat(one, 1_000, axis=0))


@pytest.mark.parametrize("method", METHODS)
def test_no_rows(method):
    mixture = mixture_of_normals(2, 3)
    for rows in (np.empty((0, 3)), np.empty((0, 3), np.float32), np.empty((0, 3), order="F"), rows_of(9, 3)[9:]):
        got = getattr(mixture, method)(rows)
        assert got.shape == ((0,) if method in ("log_density", "assign") else (0, 2))


@pytest.mark.parametrize("method", METHODS)
def test_tables_in_many_batches_have_the_bits_of_the_array(method):
    mixture, rows = mixture_of_normals(6, 4), rows_of(150_000, 4)
    want = getattr(mixture, method)(rows)
    batches = [
        pa.record_batch({f"x{j}": pa.array(rows[start:end, j], from_pandas=True) for j in (2, 0, 3, 1)})
        for start, end in ((0, 5), (5, 5), (5, 140_001), (140_001, 150_000))
    ]
    np.testing.assert_array_equal(getattr(mixture, method)(pa.Table.from_batches(batches)), want)


def test_components_as_likely_as_each_other():
    """The first of equals is the answer, and the best of the responsibilities."""
    grid = np.linspace(-3.0, 3.0, 2_001)[:, None]
    for deviation in (0.05, 0.39894228040143265, 1.0):  # with the second one log densities pass 0
        mixture = drumlin.Mixture([0.25] * 4, [[-1.0], [1.0], [-1.0], [1.0]], np.full((4, 1, 1), deviation**2))
        found = mixture.assign(grid)
        assert np.array_equal(found, (grid[:, 0] > 0.0).astype(int))
        assert np.array_equal(found, mixture.responsibilities(grid).argmax(axis=1))


def test_rows_beyond_every_density_go_to_the_nearest():
    covariances = [np.diag([4.0, 1.0]), np.diag([1.0, 4.0])]  # narrow beside the distance of the means
    mixture = drumlin.Mixture([0.5, 0.5], [[-100.0, 0.0], [100.0, 90.0]], covariances, ids=[5, 9])
    rows = np.array([[1e160, 0.0], [3.0, -1e160], [-1e300, 1e100], [1e30, 1e307], [-99.0, 0.1], [90.0, 90.0]])
    assert mixture.assign(rows).tolist() == [5, 9, 5, 9, 5, 9]
    assert mixture.responsibilities(rows[:4]).tolist() == [[1.0, 0.0], [0.0, 1.0], [1.0, 0.0], [0.0, 1.0]]
    assert (mixture.log_density(rows)[:4] == -1e290).all()


def test_codes_of_a_model_are_gaps():
    rows = rows_of(5_000, 2, seed=3)
    rows = rows[np.abs(rows).max(axis=1) < 10.0]
    coded = rows.copy()
    coded[::3, 0], coded[1::3, 1], coded[2::30] = -9.0, 99.0, np.nan
    options = {"missing": "complete-rows", "missing_codes": {"x0": [-9.0], "*": [99.0]}, "pass_limit": 2}
    model = drumlin.fit(coded, 1, progress=False, **options)
    gaps = ((coded == 99.0) | np.isnan(coded)).any(axis=1) | (coded[:, 0] == -9.0)
    assert 0.5 < gaps.mean() < 0.9
    table = pa.table({"x1": coded[:, 1], "x0": coded[:, 0]})
    for given in (coded, coded.astype(np.float32), np.asfortranarray(coded), table):
        assert np.array_equal(model.assign(given) == -1, gaps)
        assert np.array_equal(np.isnan(model.log_density(given)), gaps)
    np.testing.assert_array_equal(model.log_density(coded)[~gaps], model.mixture.log_density(coded[~gaps]))
    assert model.mixture.assign(np.array([[-9.0, 99.0]])).tolist() == [0]  # a mixture knows no codes


def test_an_infinite_value_names_its_row():
    mixture, rows = mixture_of_normals(2, 3), np.zeros((100_000, 3))
    rows[70_001, 1] = rows[90_000, 0] = np.inf
    for given in (rows, np.asfortranarray(rows), pa.table({f"x{j}": rows[:, j] for j in range(3)})):
        with pytest.raises(drumlin.DataError, match="infinite") as caught:
            mixture.assign(given)
        assert caught.value.facts["row"] == 70_001 and caught.value.facts["column"] == "x1"


def test_threads_do_not_matter(monkeypatch):
    from drumlin import memory

    mixture, rows = mixture_of_normals(7, 5), rows_of(60_000, 5)
    found = {}
    for threads in (1, 2, 5):
        monkeypatch.setattr(memory, "usable_cores", lambda threads=threads: threads)
        found[threads] = [getattr(mixture, method)(rows) for method in METHODS]
    for threads in (2, 5):
        for one, other in zip(found[1], found[threads], strict=True):
            np.testing.assert_array_equal(one, other)
