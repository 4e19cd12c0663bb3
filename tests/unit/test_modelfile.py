"""Saving and loading. How damage is refused is in tests/contract/test_model_file.py."""

import json
import os
import stat

import numpy as np
import pytest

import drumlin
from drumlin import modelfile


@pytest.fixture(scope="module")
def model():
    rows = np.random.default_rng(0).normal(size=(300, 2)) + np.repeat([[0.0], [7.0]], 150, axis=0)
    rows[::50, 0] = -9999
    return drumlin.fit(
        rows, 2, columns=["länge", "weite"], missing="complete-rows", missing_codes={"länge": -9999}
    ).with_names({1: "große"})


@pytest.mark.parametrize("structure", ["full", "diagonal", "spherical"])
@pytest.mark.parametrize("pooled", [False, True])
def test_there_and_back(tmp_path, structure, pooled):
    rows = np.random.default_rng(0).normal(size=(300, 3)) * [1e-9, 1.0, 1e9] + [0.0, 1e6, 0.0]
    model = drumlin.fit(rows, 2, structure=structure, pooled=pooled)
    path = model.save(tmp_path / "m.drumlin")
    again = drumlin.load(path)
    assert again == model and again.to_bytes() == model.to_bytes() == (tmp_path / "m.drumlin").read_bytes()
    assert again.record == model.record and again.figures == model.figures and again.notes == model.notes
    np.testing.assert_array_equal(again.mixture.covariances, model.mixture.covariances)
    np.testing.assert_array_equal(again.log_density(rows), model.log_density(rows))


def test_names_codes_and_ids_come_back(tmp_path, model):
    again = drumlin.load(model.save(tmp_path / "m.drumlin"))
    assert again.names == {1: "große"} and again.columns == ("länge", "weite")
    assert dict(again.missing_codes) == {"länge": (-9999.0,)} and again.missing == "complete-rows"
    rows = np.array([[-9999.0, 0.0], [0.0, 0.0]])
    assert np.isnan(again.log_density(rows)).tolist() == [True, False]
    assert again.assign(rows).tolist()[0] == -1


def test_other_readers_can_open_it(tmp_path, model):
    """The container is the public one, and the description plain JSON."""
    from safetensors import safe_open

    path = model.save(tmp_path / "m.drumlin")
    with safe_open(path, framework="numpy") as file:
        body = json.loads(file.metadata()["drumlin"])["drumlin"]
        assert sorted(file.keys()) == ["centre", "covariances", "ids", "means", "spread", "weights"]
        np.testing.assert_array_equal(file.get_tensor("means"), model.mixture.means)
    assert body["format"] == 1 and body["requires"] == [] and body["checksum"] == model.checksum
    assert all(body["model"][slot] is None for slot in modelfile.LATER_SLOTS)
    assert body["model"]["names"] == {"1": "große"}


def test_the_checksum_is_of_the_model_part_only(model):
    rows = np.random.default_rng(0).normal(size=(300, 2))
    one, two = (drumlin.fit(rows, 2, threads=threads, memory=memory) for threads, memory in ((1, "1 GB"), (2, "2 GB")))
    assert one.checksum == two.checksum and one.record != two.record
    assert len(one.checksum) == 64 and int(one.checksum, 16)
    assert model.checksum != one.checksum


def test_saving_twice(tmp_path, model):
    path = tmp_path / "m.drumlin"
    model.save(path)
    before = path.read_bytes()
    with pytest.raises(drumlin.TargetError, match="replace=True"):
        model.with_names({0: "x"}).save(path)
    assert path.read_bytes() == before
    model.with_names({0: "x"}).save(str(path), replace=True)
    assert drumlin.load(path).names == {0: "x", 1: "große"}
    assert os.listdir(tmp_path) == ["m.drumlin"]
    mask = os.umask(0)
    os.umask(mask)
    assert stat.S_IMODE(path.stat().st_mode) == 0o666 & ~mask


def test_saving_removes_what_a_killed_process_left(tmp_path, model):
    stray = tmp_path / ".m.drumlin.drumlin-4194305-0123abcd.part"  # above the largest process number of Linux
    living = tmp_path / f".m.drumlin.drumlin-{os.getpid()}-0123abcd.part"
    for path in (stray, living):
        path.write_bytes(b"half")
    model.save(tmp_path / "m.drumlin")
    assert sorted(os.listdir(tmp_path)) == [living.name, "m.drumlin"]


def test_places_that_cannot_be_written(tmp_path, model):
    with pytest.raises(drumlin.TargetError, match="is a folder"):
        model.save(tmp_path, replace=True)
    with pytest.raises(drumlin.TargetError, match="cannot be written"):
        model.save(tmp_path / "nowhere" / "m.drumlin")


def test_a_failed_write_leaves_nothing(tmp_path, model, monkeypatch):
    path = tmp_path / "m.drumlin"
    path.write_bytes(b"old")

    def full(descriptor):
        raise OSError(28, "No space left on device")

    monkeypatch.setattr(modelfile.os, "fsync", full)
    with pytest.raises(drumlin.TargetError, match="No space left on device"):
        model.save(path, replace=True)
    monkeypatch.setattr(modelfile.os, "fsync", lambda descriptor: (_ for _ in ()).throw(KeyboardInterrupt))
    with pytest.raises(KeyboardInterrupt):
        model.save(path, replace=True)
    assert os.listdir(tmp_path) == ["m.drumlin"] and path.read_bytes() == b"old"


@pytest.mark.parametrize(
    "content", [b"", b"abc", b"PAR1" * 100, b"\xff" * 4096, b"{}", b"\x02\x00\x00\x00\x00\x00\x00\x00{}"]
)
def test_files_that_are_no_model(tmp_path, content):
    path = tmp_path / "m.drumlin"
    path.write_bytes(content)
    with pytest.raises(drumlin.DamagedFileError, match=r"m\.drumlin cannot be loaded"):
        drumlin.load(path)


def test_a_missing_file():
    with pytest.raises(drumlin.SourceError, match="No such file"):
        drumlin.load("nowhere.drumlin")


def rebuilt(model, change):
    """The bytes of `model` with its parts changed and both checksums made right again."""
    import hashlib

    from drumlin import _core

    text, tensors = _core.unpack(model.to_bytes())
    body = json.loads(text)["drumlin"]
    tensors = {name: np.array(array) for name, array in tensors.items()}
    change(body["model"], tensors)
    body["checksum"] = modelfile._checksum(body["model"], tensors)
    body["record_checksum"] = hashlib.sha256(modelfile._canonical(body["record"])).hexdigest()
    return _core.pack(json.dumps({"drumlin": body}), tensors)


def entry(name, value):
    return lambda part, tensors: part.__setitem__(name, value)


def tensor(name, value):
    return lambda part, tensors: tensors.__setitem__(name, np.array(value))


def figure(name, value):
    return lambda part, tensors: part["figures"].__setitem__(name, value)


@pytest.mark.parametrize(
    ("change", "reason"),
    [
        (entry("columns", ["a"]), "shape"),
        (entry("columns", ["a", "a"]), "twice"),
        (entry("columns", ["a", 1]), "not a text"),
        (entry("columns", []), "no columns"),
        (entry("structure", "factor"), "factor"),
        (entry("structure", "diagonal"), "shape"),
        (entry("pooled", 1), "pooled"),
        (entry("missing", "marginal"), "marginal"),
        (entry("missing_codes", {"other": [1.0]}), "other"),
        (entry("missing_codes", {"weite": ["1"]}), "finite number"),
        (entry("names", {"5": "x"}), "not an id"),
        (entry("names", {"0": "x", "1": "x"}), "both called"),
        (entry("names", {"0": "a\nb"}), "cannot be a name"),
        (entry("names", ["x"]), "per component"),
        (entry("next_id", 1), "next_id"),
        (entry("limit", 0.5), "newer drumlin"),
        (entry("portions", []), "newer drumlin"),
        (entry("surprise", None), "surprise"),
        (figure("weight", 0.0), "negative"),
        (figure("rows", 1.5), "count"),
        (figure("entropy", "x"), "finite"),
        (figure("more", 1), "figures"),
        (tensor("weights", [0.5, 0.6]), "sum to 1"),
        (tensor("weights", [1.5, -0.5]), "sum to 1"),
        (tensor("means", [[0.0, np.nan], [0.0, 1.0]]), "not finite"),
        (tensor("means", np.zeros((2, 2), dtype=np.int64)), "type"),
        (tensor("covariances", np.array([np.eye(2), -np.eye(2)])), "positive"),
        (tensor("covariances", np.ones((2, 2, 2))), "positive"),
        (tensor("ids", np.array([1, 1], dtype=np.int32)), "ids"),
        (tensor("ids", np.array([-1, 1], dtype=np.int32)), "ids"),
        (tensor("ids", np.array([0, 1], dtype=np.int64)), "type"),
        (tensor("spread", [1.0, 0.0]), "above 0"),
        (tensor("spread", [1.0, 3.0]), "power of two"),
        (tensor("spread", [1.0]), "shape"),
        (tensor("extra", [1.0]), "extra"),
        (lambda part, tensors: tensors.pop("ids"), "ids"),
    ],
)
def test_contents_that_make_no_sense(model, change, reason):
    """Even with checksums that fit, every part is looked at."""
    modelfile.from_bytes(rebuilt(model, lambda part, tensors: None))
    with pytest.raises(drumlin.DamagedFileError, match=reason):
        modelfile.from_bytes(rebuilt(model, change))
