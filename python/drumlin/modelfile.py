"""The model file: a safetensors container with versioned JSON, safe to open.

Layout of format 1. The container's metadata hold one text under "drumlin"; it is this JSON:

    {"drumlin": {"format": 1, "requires": [], "checksum": ..., "record_checksum": ..., "model": {...}, "record": {...}}}

`model` is the same for the same fit on any machine, `record` tells how it came about (times, paths, threads). Tensors:
weights (k,), means (k, d), covariances (as the structure stores them), ids (k,) int32, centre (d,), spread (d,). Both
checksums are SHA-256: of the canonical JSON of `model` and of the tensors in the order of their names, and of the
canonical JSON of `record`. Loading checks everything and runs no code.
"""

from __future__ import annotations

import hashlib
import json
import math
import os
from typing import Any

import numpy as np
from numpy.typing import NDArray

from drumlin.beside import write_whole
from drumlin.errors import DamagedFileError, DrumlinError, OptionError, SourceError, TargetError
from drumlin.mixture import MOST_ID, Mixture
from drumlin.model import Figures, Model, _checked_name, check_names_differ
from drumlin.options import MISSING, STRUCTURES

FORMAT = 1
"""The format this version writes, and the newest that it reads."""

KNOWN_REQUIREMENTS: frozenset[str] = frozenset()
"""What a file may require of its reader beyond format 1."""

LATER_SLOTS = ("limit", "groups", "transforms", "statistics", "portions")
"""Slots of format 1 that this version keeps empty."""

MOST_HEADER = 100_000_000
"""The most bytes of a container's header."""

Tensors = dict[str, NDArray[Any]]


def load(path: str | os.PathLike[str]) -> Model:
    """Load a model from its file. Runs no code from the file.

    SourceError when it cannot be read; DamagedFileError (exit code 5) when it is truncated, edited, not a model file,
    or needs a newer drumlin. Cost: one read of the file, and one factorisation per component.

    >>> import drumlin
    >>> drumlin.load("nowhere.drumlin")
    Traceback (most recent call last):
    drumlin.errors.SourceError: nowhere.drumlin cannot be read: No such file or directory.
    """
    label = os.fspath(path)
    try:
        with open(path, "rb") as file:
            size = os.fstat(file.fileno()).st_size
            start = file.read(8)
            header = int.from_bytes(start, "little")
            if len(start) < 8 or not 2 <= header <= min(size - 8, MOST_HEADER):
                raise _damaged(label, "it is not a model file, or is cut short")
            data = start + file.read()
    except OSError as error:
        raise SourceError(f"{label} cannot be read: {error.strerror or error}.", file=label) from error
    return from_bytes(data, label)


def save(model: Model, path: str | os.PathLike[str], *, replace: bool = False) -> str:
    """Write `model` to `path`; see `Model.save`."""
    target = os.fspath(path)
    if os.path.isdir(target):
        raise TargetError(f"{target} is a folder: give the name of a file, such as model.drumlin.", file=target)
    if os.path.lexists(target) and not replace:
        raise TargetError(f"{target} exists: choose another name, or replace it with replace=True.", file=target)
    write_whole(target, to_bytes(model))
    return target


def to_bytes(model: Model) -> bytes:
    """Return the bytes of the model's file."""
    from drumlin import _core

    record = model.record
    body = {
        "format": FORMAT,
        "requires": [],
        "checksum": model.checksum,
        "record_checksum": hashlib.sha256(_canonical(record)).hexdigest(),
        "model": _model_part(model),
        "record": record,
    }
    return _core.pack(_canonical({"drumlin": body}).decode("ascii"), _tensors(model))


def model_checksum(model: Model) -> str:
    """Return the SHA-256 of the model part: canonical JSON, then the tensors in the order of their names."""
    return _checksum(_model_part(model), _tensors(model))


def _model_part(model: Model) -> dict[str, Any]:
    figures = model.figures
    return {
        "columns": list(model.columns),
        "missing": model.missing,
        "missing_codes": {column: list(codes) for column, codes in sorted(model.missing_codes.items())},
        "structure": model.mixture.structure,
        "pooled": model.mixture.pooled,
        "names": {str(one): name for one, name in model.names.items()},
        "next_id": model._next_id,
        "figures": {
            "rows": figures.rows,
            "weight": figures.weight,
            "log_likelihood": figures.log_likelihood,
            "entropy": figures.entropy,
            "held_rows": figures.held_rows,
            "held_weight": figures.held_weight,
            "held_log_likelihood": figures.held_log_likelihood,
        },
        **dict.fromkeys(LATER_SLOTS),
    }


def _tensors(model: Model) -> Tensors:
    mixture = model.mixture
    return {
        "weights": mixture.weights,
        "means": mixture.means,
        "covariances": mixture._inner.stored,
        "ids": mixture.ids,
        "centre": mixture._scaling.centre,
        "spread": mixture._scaling.spread,
    }


def _canonical(value: Any) -> bytes:
    return json.dumps(value, sort_keys=True, separators=(",", ":"), allow_nan=False, ensure_ascii=True).encode("ascii")


def _checksum(part: dict[str, Any], tensors: Tensors) -> str:
    digest = hashlib.sha256(_canonical(part))
    for name in sorted(tensors):
        array = np.ascontiguousarray(tensors[name])
        array = array.astype(array.dtype.newbyteorder("<"), copy=False)
        digest.update(f"\n{name} {array.dtype.str} {array.shape}\n".encode("ascii"))
        digest.update(array.tobytes())
    return digest.hexdigest()


def from_bytes(data: bytes, label: str = "the model file") -> Model:
    """Return the model held in the bytes of a model file. DamagedFileError when anything about them is wrong."""
    from drumlin import _core

    try:
        text, tensors = _core.unpack(data)
    except DamagedFileError as error:
        raise _damaged(label, str(error).rstrip(".")) from error
    body = _body(text, label)
    part, record = body["model"], body["record"]
    if hashlib.sha256(_canonical(record)).hexdigest() != body["record_checksum"]:
        raise _damaged(label, "its record was changed after it was written")
    if _checksum(part, tensors) != body["checksum"]:
        raise _damaged(label, "its numbers or names were changed after it was written")
    try:
        return _build(part, record, tensors)
    except _Wrong as wrong:
        raise _damaged(label, str(wrong)) from wrong
    except DrumlinError as error:
        raise _damaged(label, str(error).rstrip(".")) from error


class _Wrong(Exception):
    """What is wrong with the contents of a file."""


def _damaged(label: str, reason: str) -> DamagedFileError:
    return DamagedFileError(f"{label} cannot be loaded: {reason}.", file=label)


def _body(text: str, label: str) -> dict[str, Any]:
    """Parse the JSON text and check its outermost layer, format and requirements first."""

    def no_repeats(pairs: list[tuple[str, Any]]) -> dict[str, Any]:
        found = dict(pairs)
        if len(found) != len(pairs):
            raise ValueError("a name stands twice")
        return found

    def no_constant(word: str) -> Any:
        raise ValueError(f"{word} is not a number")

    try:
        outer = json.loads(text, object_pairs_hook=no_repeats, parse_constant=no_constant)
    except (ValueError, RecursionError) as error:
        raise _damaged(label, f"its description is not valid JSON ({error})") from error
    body = outer.get("drumlin") if isinstance(outer, dict) else None
    if not isinstance(body, dict) or type(body.get("format")) is not int or body["format"] < 1:
        raise _damaged(label, "it holds no drumlin model of a known format")
    if body["format"] > FORMAT:
        raise _damaged(
            label, f"it has format {body['format']}, this version reads up to format {FORMAT}; use a newer drumlin"
        )
    requires = body.get("requires")
    if not isinstance(requires, list) or not all(isinstance(item, str) for item in requires):
        raise _damaged(label, "its list of requirements is not a list of texts")
    unknown = sorted(set(requires) - KNOWN_REQUIREMENTS)
    if unknown:
        raise _damaged(
            label, f"it requires {', '.join(unknown)}, which this version does not know; use a newer drumlin"
        )
    shapes = {"checksum": str, "record_checksum": str, "model": dict, "record": dict}
    for name, kind in shapes.items():
        if not isinstance(body.get(name), kind):
            raise _damaged(label, f"its part {name!r} is missing or of the wrong kind")
    return body


def _need(condition: bool, reason: str) -> None:
    if not condition:
        raise _Wrong(reason)


def _build(part: dict[str, Any], record: dict[str, Any], tensors: Tensors) -> Model:
    from drumlin import _core

    wanted = {"columns", "missing", "missing_codes", "structure", "pooled", "names", "next_id", "figures", *LATER_SLOTS}
    _need(set(part) == wanted, f"its model part has the wrong entries: {sorted(set(part) ^ wanted)}")
    for slot in LATER_SLOTS:
        _need(part[slot] is None, f"it uses {slot!r}, which this version does not know; use a newer drumlin")
    columns = part["columns"]
    _need(isinstance(columns, list) and len(columns) > 0, "it names no columns")
    _need(all(isinstance(name, str) and name for name in columns), "a column name is not a text")
    _need(len(set(columns)) == len(columns), "a column name stands twice")
    _need(part["structure"] in STRUCTURES, f"the structure {part['structure']!r} is not known")
    _need(isinstance(part["pooled"], bool), "'pooled' is not true or false")
    _need(part["missing"] in MISSING, f"missing={part['missing']!r} is not known")
    weights, ids, scaling = _checked_tensors(tensors, len(columns), part["structure"], part["pooled"])
    _need(type(part["next_id"]) is int and int(ids.max()) < part["next_id"] <= MOST_ID + 1, "'next_id' is out of range")
    core = _core.Mixture(weights, tensors["means"], tensors["covariances"], part["structure"], part["pooled"])
    codes = _checked_codes(part["missing_codes"], columns)
    mixture = Mixture._of(core, tuple(columns), ids.tolist(), _core.Scaling(*scaling))
    names = _checked_names(part["names"], set(ids.tolist()))
    _need(
        isinstance(record.get("notes", []), list) and isinstance(record.get("trace", []), list),
        "the notes or the trace of its record are not lists",
    )
    return Model(mixture, part["missing"], codes, _checked_figures(part["figures"]), names, record, part["next_id"])


def _checked_tensors(
    tensors: Tensors, d: int, structure: str, pooled: bool
) -> tuple[NDArray[np.float64], NDArray[np.int32], tuple[NDArray[np.float64], NDArray[np.float64]]]:
    wanted = {"weights", "means", "covariances", "ids", "centre", "spread"}
    _need(set(tensors) == wanted, f"its arrays are not the right ones: {sorted(set(tensors) ^ wanted)}")
    weights = tensors["weights"]
    _need(weights.ndim == 1 and len(weights) > 0, "the weights are not a list of numbers")
    k = len(weights)
    rows = 1 if pooled else k
    shapes = {
        "weights": (k,),
        "means": (k, d),
        "covariances": {"full": (rows, d, d), "diagonal": (rows, d), "spherical": (rows,)}[structure],
        "ids": (k,),
        "centre": (d,),
        "spread": (d,),
    }
    for name, shape in shapes.items():
        kind = np.dtype(np.int32 if name == "ids" else np.float64)
        found = tensors[name]
        _need(found.dtype == kind, f"{name} has numbers of type {found.dtype}, not {kind}")
        _need(found.shape == shape, f"{name} has the shape {found.shape}, not {shape}")
        _need(bool(np.isfinite(found).all()), f"{name} holds a value that is not finite")
    _need(bool((weights >= 0.0).all()) and abs(float(weights.sum()) - 1.0) <= 1e-9, "the weights do not sum to 1")
    ids = tensors["ids"]
    _need(int(ids.min()) >= 0 and len(np.unique(ids)) == k, "the ids are negative or not all different")
    spread = tensors["spread"]
    _need(bool((spread > 0.0).all()), "a spread is not above 0")
    _need(bool((np.frexp(spread)[0] == 0.5).all()), "a spread is not a power of two")
    return weights, ids, (tensors["centre"], spread)


def _checked_codes(listed: Any, columns: list[str]) -> dict[str, tuple[float, ...]]:
    _need(isinstance(listed, dict), "the codes for gaps are not given per column")
    found: dict[str, tuple[float, ...]] = {}
    for column, codes in listed.items():
        _need(column == "*" or column in columns, f"codes are given for {column!r}, which is not a column")
        _need(isinstance(codes, list) and bool(codes), f"the codes of {column!r} are not a list")
        _need(
            all(type(code) in (int, float) and math.isfinite(code) for code in codes), "a code is not a finite number"
        )
        found[column] = tuple(float(code) for code in codes)
    return found


def _checked_names(listed: Any, ids: set[int]) -> dict[int, str]:
    _need(isinstance(listed, dict), "the names are not given per component")
    names: dict[int, str] = {}
    for one, name in listed.items():
        _need(one.isdigit() and str(int(one)) == one and int(one) in ids, f"a name is given for {one!r}, not an id")
        _need(isinstance(name, str) and bool(name), f"the name of component {one} is not a text")
        names[int(one)] = _checked_name(name)
    try:
        check_names_differ(names)
    except OptionError as error:
        raise _Wrong(str(error).rstrip(".")) from error
    return names


def _checked_figures(listed: Any) -> Figures:
    wanted = set(Figures.__dataclass_fields__)
    _need(isinstance(listed, dict) and set(listed) == wanted, "the figures of the fit are not the right ones")
    for name, value in listed.items():
        if name in ("rows", "held_rows"):
            _need(type(value) is int and value >= 0, f"{name!r} is not a count")
        elif name != "entropy" or value is not None:
            _need(type(value) in (int, float) and math.isfinite(value), f"{name!r} is not a finite number")
    _need(listed["weight"] > 0.0 and listed["held_weight"] >= 0.0, "a summed row weight is negative")
    counts = {name: int(listed[name]) for name in ("rows", "held_rows")}
    totals = {name: None if listed[name] is None else float(listed[name]) for name in wanted - set(counts)}
    return Figures(**counts, **totals)  # type: ignore[arg-type]
