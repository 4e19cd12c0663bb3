"""The options: defaults, checks, flags, and what verbs remember."""

import dataclasses
import os

import numpy as np
import pytest

import drumlin
from drumlin import memory, options
from drumlin.options import Columns, Machine, Search, Shape, TableOptions, Writing

REFUSED = [
    (Columns, "columns", []),
    (Columns, "columns", ["a", "a"]),
    (Columns, "columns", ["a", 1]),
    (Columns, "columns", 5),
    (Columns, "missing", "marginal"),
    (Columns, "missing", "drop"),
    (Columns, "missing_codes", {"a": [float("nan")]}),
    (Columns, "missing_codes", {"a": ["x"]}),
    (Columns, "missing_codes", {1: [2.0]}),
    (Columns, "missing_codes", "a"),
    (Columns, "missing_codes", 7),
    (TableOptions, "where", ""),
    (TableOptions, "where", 3),
    (TableOptions, "row_weight", ["w"]),
    (TableOptions, "row_weight", ""),
    (TableOptions, "key", []),
    (TableOptions, "hold_out", 0.0),
    (TableOptions, "hold_out", 1),
    (TableOptions, "hold_out", []),
    (Shape, "structure", "Full"),
    (Shape, "structure", None),
    (Shape, "pooled", 1),
    (Shape, "floor", -1e-9),
    (Shape, "floor", 1.0),
    (Shape, "floor", float("nan")),
    (Search, "method", "accelerated"),
    (Search, "start_from", "kmeans"),
    (Search, "tries", 0),
    (Search, "tries", 2.5),
    (Search, "tries", True),
    (Search, "pass_limit", 0),
    (Search, "tolerance", -1.0),
    (Search, "tolerance", float("inf")),
    (Search, "tolerance", "1e-6"),
    (Search, "seed", -1),
    (Search, "precision", "half"),
    (Search, "precision", None),
    (Search, "on_interrupt", "go on"),
    (Machine, "memory", "much"),
    (Machine, "memory", "10 MB"),
    (Machine, "memory", True),
    (Machine, "threads", 0),
    (Machine, "spill", 5),
    (Machine, "spill", ""),
    (Machine, "spill", "nowhere/at/all"),
    (Machine, "engine", "cluster"),
    (Machine, "progress", "yes"),
    (Writing, "outputs", ["tail"]),
    (Writing, "outputs", 4),
    (Writing, "prefix", None),
    (Writing, "replace", "yes"),
    (Writing, "carry", 5),
]


@pytest.mark.parametrize(("group", "name", "value"), REFUSED)
def test_a_bad_value_is_refused_with_the_option_and_what_was_found(group, name, value):
    with pytest.raises(drumlin.OptionError) as caught:
        group(**{name: value})
    assert name in str(caught.value)
    assert caught.value.facts["option"] == name


def test_every_option_has_a_refused_value():
    refused = {(group, name) for group, name, _ in REFUSED}
    all_options = {
        (group, one.name)
        for group in (Columns, TableOptions, Shape, Search, Machine, Writing)
        for one in dataclasses.fields(group)
    }
    assert len(all_options) > 20
    assert all_options == refused


def test_the_later_value_of_missing_says_what_there_is():
    with pytest.raises(drumlin.OptionError, match="complete-rows"):
        Columns(missing="marginal")


def test_values_are_put_in_one_form():
    assert Columns(columns="a").columns == ("a",)
    assert Columns(columns=["b", "a"]).columns == ("b", "a")
    assert Columns(missing_codes={"b": -1, "a": [-9999, -9999.0, 5]}).missing_codes == {
        "a": (-9999.0, 5.0),
        "b": (-1.0,),
    }
    assert Columns(missing_codes=["a=-9999", "*=-1", "a=-1"]).missing_codes == {"*": (-1.0,), "a": (-9999.0, -1.0)}
    assert Columns(missing_codes={"a": []}).missing_codes is None
    assert Search(tries=np.int64(3), seed=np.uint8(4)) == Search(tries=3, seed=4)
    assert Search(tolerance=np.float32(0.5)).tolerance == 0.5 and Search(tolerance=0).tolerance == 0.0
    assert Shape(pooled=np.True_).pooled is True
    assert Writing(outputs="responsibilities").outputs == ("responsibilities",)
    assert Writing(carry=[]).carry == () and Writing(carry=["all"]).carry == "all"


def test_the_record_is_plain():
    import json

    import pyarrow.compute as pc

    record = TableOptions(where=pc.field("a") > 1, key=["k"], hold_out=0.25).as_record()
    assert json.loads(json.dumps(record)) == {"where": "(a > 1)", "row_weight": None, "key": ["k"], "hold_out": 0.25}


def test_flags_read_their_text():
    flags = {flag.name: flag for flag in options.flags("fit")}
    assert flags["columns"].read("a, b") == ["a", "b"]
    assert flags["pooled"].switch and not flags["structure"].switch
    assert flags["missing_codes"].multiple
    assert flags["hold_out"].read("0.1") == 0.1 and flags["hold_out"].read("day > 3") == "day > 3"
    assert flags["structure"].choices == ("full", "diagonal", "spherical")
    assert [flag.flag for flag in options.flags(Machine, only=["threads"])] == ["--threads"]
    assert all(flag.help.endswith(".") for verb in options.VERBS for flag in options.flags(verb))


def test_signatures_are_those_of_the_definitions():
    for verb in options.VERBS:
        assert options.signature_problems(getattr(drumlin, verb), verb) == []


def test_signature_problems_are_found():
    def missing_one(rows, *, structure="full"): ...

    assert options.signature_problems(missing_one, "fit")
    names = [one.name for one in options.verb_fields("fit")]
    wrong = {"tries": 7, "pooled": 0}
    text = ", ".join(f"{name}=values[{name!r}]" for name in names)
    values = {one.name: wrong.get(one.name, one.default) for one in options.verb_fields("fit")}
    scope = {"values": values}
    exec(f"def other(rows, *, {text}): ...", scope)
    assert len(options.signature_problems(scope["other"], "fit")) == 2


def test_an_unknown_option_is_named_with_the_nearest():
    with pytest.raises(drumlin.OptionError, match="'tolerance'"):
        drumlin.fit(np.zeros((3, 1)), 1, tolarance=1)


def test_what_was_written_out_is_remembered_for_the_call_only():
    @options.remember_given
    def verb(rows, *, tries=8, seed=0):
        return options.given()

    assert verb(1) == frozenset()
    assert verb(1, tries=8) == {"tries"}
    assert options.given() == frozenset()


@pytest.mark.parametrize(
    ("text", "size"),
    [
        ("1 GiB", 2**30),
        ("600 MB", 600_000_000),
        ("0.5gb", 500_000_000),
        ("2g", 2**31),
        ("1_000_000_000", 10**9),
        (10**9, 10**9),
    ],
)
def test_sizes(text, size):
    assert memory.parse_size(text) == size
    assert Machine(memory=text).memory_bytes == size


def test_defaults_come_from_the_machine(monkeypatch):
    assert 0 < Machine().memory_bytes
    assert 1 <= Machine().thread_count <= len(os.sched_getaffinity(0))
    monkeypatch.setattr(memory, "usable_cores", lambda: 3)
    assert Machine().thread_count == 3
    assert Machine(threads=2).thread_count == 2


def group_files(tmp_path, monkeypatch, files):
    for name, text in files.items():
        (tmp_path / name).write_text(text)
    monkeypatch.setattr(memory, "_groups", lambda kind: [tmp_path])


def test_container_limits_of_version_2(tmp_path, monkeypatch):
    stat = "anon 5\ninactive_file 100000000\n"
    files = {"memory.max": "1000000000\n", "memory.current": "600000000\n", "memory.stat": stat}
    group_files(tmp_path, monkeypatch, files | {"cpu.max": "150000 100000\n"})
    assert memory.free_bytes() == 500_000_000
    assert memory._processor_share() == 2


def test_container_limits_of_version_1(tmp_path, monkeypatch):
    files = {"memory.limit_in_bytes": "900000000", "memory.usage_in_bytes": "100000000"}
    group_files(tmp_path, monkeypatch, files | {"cpu.cfs_quota_us": "100000", "cpu.cfs_period_us": "100000"})
    assert memory.free_bytes() == 800_000_000
    assert memory._processor_share() == 1


def test_no_container_limit(tmp_path, monkeypatch):
    group_files(tmp_path, monkeypatch, {"memory.max": "max", "cpu.max": "max 100000", "cpu.cfs_quota_us": "-1"})
    assert memory._container_free() >= 1 << 60
    assert memory._processor_share() is None
