"""The model file: the golden file of format 1, the same bytes there and back, and every kind of damage."""

import json
import pickle
import struct
from pathlib import Path

import numpy as np
import pytest
from safetensors.numpy import load_file

import datasets
import drumlin
from drumlin import _core, modelfile

GOLDEN = datasets.DATA / "golden_format1.drumlin"
# Written down when the file was made. It must never change.
GOLDEN_CHECKSUM = "c103fb009a3ea3156fd6477b6f6ec9ab6ee050822b0e412d59634154954810c8"
# Log densities of three rows, written down with it.
GOLDEN_DENSITY = [-3.748071694014645, -4.9564377848648045, -7.092917301425966]


@pytest.fixture(scope="module")
def model():
    rows = datasets.hills(3_000, components=3, columns=2, seed=4)
    return drumlin.fit(rows, 3, seed=1, tries=2, pass_limit=20).with_names({0: "large", 2: "small é"})


@pytest.fixture
def saved(model, tmp_path):
    return model.save(tmp_path / "model.drumlin")


def parts(data: bytes) -> tuple[dict, dict, bytes]:
    """Header of the container, the description in it, and the bytes of the arrays."""
    length = struct.unpack("<Q", data[:8])[0]
    header = json.loads(data[8 : 8 + length])
    return header, json.loads(header["__metadata__"]["drumlin"]), data[8 + length :]


def assembled(header: dict, description: dict, arrays: bytes) -> bytes:
    header = header | {"__metadata__": header["__metadata__"] | {"drumlin": json.dumps(description)}}
    text = json.dumps(header).encode()
    text += b" " * (-len(text) % 8)
    return struct.pack("<Q", len(text)) + text + arrays


def test_golden_file_of_format_one():
    model = drumlin.load(GOLDEN)
    assert model.checksum == GOLDEN_CHECKSUM
    assert model.columns == ("length_cm", "weight_kg")
    assert model.names == {0: "small boxes", 1: "long tubes"}
    assert model.mixture.structure == "full" and not model.mixture.pooled
    assert model.mixture.components == 3 and model.mixture.ids.tolist() == [0, 1, 2]
    assert model.missing == "complete-rows" and dict(model.missing_codes) == {"weight_kg": (-9999.0,)}
    density = model.log_density(np.array([[30.0, 2.0], [120.0, 1.5], [40.0, 20.0]]))
    np.testing.assert_allclose(density, GOLDEN_DENSITY, rtol=1e-13)
    assert model.rows == 891 and model.record["options"]["seed"] == 2 and len(model.notes) == 2


def test_golden_file_saves_to_the_same_model_part(tmp_path):
    path = drumlin.load(GOLDEN).save(tmp_path / "again.drumlin")
    old, new = (parts(Path(name).read_bytes()) for name in (GOLDEN, path))
    assert new[1]["drumlin"]["model"] == old[1]["drumlin"]["model"]
    assert new[1]["drumlin"]["checksum"] == old[1]["drumlin"]["checksum"] == GOLDEN_CHECKSUM
    assert new[2] == old[2], "the arrays, byte for byte"


def test_there_and_back(model, saved, tmp_path):
    loaded = drumlin.load(saved)
    assert loaded.checksum == model.checksum and loaded == model
    assert loaded.names == model.names and loaded.record == model.record and loaded.notes == model.notes
    rows = datasets.hills(100, components=3, columns=2, seed=5)
    for name in ("log_density", "responsibilities", "assign", "distance"):
        assert np.array_equal(getattr(loaded, name)(rows), getattr(model, name)(rows)), name
    again = loaded.save(tmp_path / "again.drumlin")
    assert Path(again).read_bytes() == Path(saved).read_bytes()


def test_pickle_goes_through_the_file(model):
    again = pickle.loads(pickle.dumps(model))
    assert again == model and again.record == model.record
    mixture = pickle.loads(pickle.dumps(model.mixture))
    assert mixture == model.mixture


def test_other_readers_of_the_container_can_open_it(model, saved):
    arrays = load_file(saved)
    assert np.array_equal(arrays["means"], model.mixture.means)
    assert arrays["ids"].dtype == np.int32


def test_reserved_slots_of_format_one(saved):
    body = parts(Path(saved).read_bytes())[1]["drumlin"]
    assert body["format"] == 1 and body["requires"] == []
    for slot in ("limit", "groups", "transforms", "statistics", "portions"):
        assert slot in body["model"]


def test_machine_and_time_stand_in_the_record_only(model):
    rows = datasets.hills(3_000, components=3, columns=2, seed=4)
    other = drumlin.fit(rows, 3, seed=1, tries=2, pass_limit=20, threads=2, memory="300 MB").with_names(model.names)
    assert other.checksum == model.checksum
    one, two = (parts(each.to_bytes()) for each in (model, other))
    assert one[1]["drumlin"]["model"] == two[1]["drumlin"]["model"] and one[2] == two[2]
    assert one[1]["drumlin"]["record"] != two[1]["drumlin"]["record"]


def refused(tmp_path, data: bytes) -> str:
    path = tmp_path / "damaged.drumlin"
    path.write_bytes(data)
    with pytest.raises(drumlin.DamagedFileError) as caught:
        drumlin.load(path)
    assert caught.value.exit_code == 5 and "damaged.drumlin" in str(caught.value)
    return str(caught.value)


def test_every_truncation_is_refused(saved, tmp_path):
    data = Path(saved).read_bytes()
    lengths = sorted({0, 1, 7, 8, 9, len(data) - 1, len(data) - 8, *range(0, len(data), max(1, len(data) // 100))})
    assert len(lengths) > 50
    for length in lengths:
        refused(tmp_path, data[:length])
    refused(tmp_path, data + b"\0")


def test_a_flipped_bit_is_refused_or_changes_nothing(model, saved):
    """Anywhere: in the length, the header, the description or the arrays.

    Some flips only respell the same number (1e-06 and 1E-06): then the model must be the same to the last byte.
    """
    data = Path(saved).read_bytes()
    refusals = spellings = 0
    for at in range(len(data)):
        changed = bytearray(data)
        changed[at] ^= 1 << (at * 5 % 8)
        try:
            again = modelfile.from_bytes(bytes(changed))
        except drumlin.DamagedFileError:
            refusals += 1
        else:
            assert again.to_bytes() == data, (at, bytes(data[at - 20 : at + 20]))
            spellings += 1
    assert refusals > 2_000 and spellings < 20


def test_edits_that_mend_nothing(saved, tmp_path):
    header, description, arrays = parts(Path(saved).read_bytes())
    refused_texts = {}
    body = description["drumlin"]
    edits = {
        "a newer format": {"format": 2},
        "no format": {"format": None},
        "a format before the first": {"format": 0},
        "a negative format": {"format": -1},
        "a format that is no integer": {"format": True},
        "an unknown requirement": {"requires": ["portions-2"]},
        "requirements of another kind": {"requires": "portions"},
        "another name": {"model": body["model"] | {"names": {"0": "other"}}},
        "other columns": {"model": body["model"] | {"columns": ["x0"]}},
        "another structure": {"model": body["model"] | {"structure": "diagonal"}},
        "another record": {"record": body["record"] | {"stopped": "never"}},
        "no record": {"record": None},
    }
    for what, edit in edits.items():
        refused_texts[what] = refused(tmp_path, assembled(header, {"drumlin": body | edit}, arrays))
    assert "newer" in refused_texts["a newer format"]
    assert "portions-2" in refused_texts["an unknown requirement"]
    assert assembled(header, description, arrays) and drumlin.load(saved), "unedited, it loads"


def test_reassembled_without_an_edit_it_loads(saved, tmp_path):
    path = tmp_path / "reassembled.drumlin"
    path.write_bytes(assembled(*parts(Path(saved).read_bytes())))
    assert drumlin.load(path) == drumlin.load(saved)


@pytest.mark.parametrize(
    "what", ["nan", "infinity", "weights", "negative weight", "indefinite", "asymmetric", "spread"]
)
def test_numbers_that_are_no_mixture_are_refused_even_with_a_right_checksum(model, tmp_path, what):
    """A careful forger mends the checksums: the numbers are checked for themselves."""
    tensors = {name: np.array(value) for name, value in modelfile._tensors(model).items()}
    match what:
        case "nan":
            tensors["means"][1, 0] = np.nan
        case "infinity":
            tensors["centre"][0] = np.inf
        case "weights":
            tensors["weights"][0] += 0.01
        case "negative weight":
            tensors["weights"][:2] = tensors["weights"][0] + tensors["weights"][1] + 0.1, -0.1
        case "indefinite":
            tensors["covariances"][2] = [[1.0, 2.0], [2.0, 1.0]]
        case "asymmetric":
            tensors["covariances"][2][0, 1] *= 1.5
        case "spread":
            tensors["spread"][0] = 3.0
    part, record = modelfile._model_part(model), model.record
    import hashlib

    body = {
        "format": 1,
        "requires": [],
        "checksum": modelfile._checksum(part, tensors),
        "record_checksum": hashlib.sha256(modelfile._canonical(record)).hexdigest(),
        "model": part,
        "record": record,
    }
    refused(tmp_path, _core.pack(json.dumps({"drumlin": body}), tensors))


def test_files_of_other_kinds_are_refused(tmp_path):
    from safetensors.numpy import save

    for data in (
        b"",
        b"PAR1" * 100,
        b"\x80\x04\x95" + b"x" * 100,
        b"{}",
        b"\xff" * 64,
        struct.pack("<Q", 2) + b"{}",
        save({"weights": np.ones(2)}),
        save({"weights": np.ones(2)}, {"drumlin": "{}"}),
        save({"weights": np.ones(2)}, {"drumlin": "not json"}),
        save({"weights": np.ones(2)}, {"drumlin": '{"drumlin": ' + "[" * 100_000 + "]" * 100_000 + "}"}),
    ):
        refused(tmp_path, data)


def test_saving_replaces_only_when_asked(model, saved, tmp_path):
    before = Path(saved).read_bytes()
    with pytest.raises(drumlin.TargetError, match="replace"):
        model.save(saved)
    other = model.with_names({0: "other"})
    assert Path(saved).read_bytes() == before
    other.save(saved, replace=True)
    assert drumlin.load(saved).names[0] == "other"
    assert [path.name for path in tmp_path.iterdir()] == ["model.drumlin"], "nothing half-written stays"


def test_saving_into_a_missing_folder(model, tmp_path):
    with pytest.raises(drumlin.TargetError, match="nowhere"):
        model.save(tmp_path / "nowhere" / "model.drumlin")
