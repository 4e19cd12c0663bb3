"""The stub of the compiled core against the binary, and the wrapper layer against its own promises."""

import ast
import dataclasses
import inspect
from pathlib import Path

import pytest

import drumlin
from drumlin import _core, options

STUB = Path(drumlin.__file__).parent / "_core.pyi"


def stub_tree() -> ast.Module:
    return ast.parse(STUB.read_text(encoding="utf-8"))


def stub_functions() -> list[ast.FunctionDef]:
    return [node for node in stub_tree().body if isinstance(node, ast.FunctionDef)]


def stub_classes() -> list[ast.ClassDef]:
    return [node for node in stub_tree().body if isinstance(node, ast.ClassDef)]


def members(node: ast.ClassDef) -> list[str]:
    return [part.name for part in node.body if isinstance(part, ast.FunctionDef) and part.name != "__new__"]


def test_the_stub_has_something_to_check():
    assert len(stub_functions()) >= 10 and len(stub_classes()) >= 10


@pytest.mark.parametrize("node", stub_functions(), ids=lambda node: node.name)
def test_every_function_is_there_with_its_parameters(node):
    function = getattr(_core, node.name)
    assert callable(function)
    described = [part.arg for part in (*node.args.posonlyargs, *node.args.args, *node.args.kwonlyargs)]
    assert list(inspect.signature(function).parameters) == described


@pytest.mark.parametrize("node", stub_classes(), ids=lambda node: node.name)
def test_every_class_is_there_with_its_members_and_final(node):
    kind = getattr(_core, node.name)
    assert isinstance(kind, type)
    names = members(node)
    assert names or node.name == "Reading", "a class of the stub without members"
    for name in names:
        assert hasattr(kind, name), f"{node.name}.{name}"
    final = any(isinstance(mark, ast.Name) and mark.id == "final" for mark in node.decorator_list)
    assert final or node.name == "Measure"
    if final:
        with pytest.raises(TypeError, match="not an acceptable base type"):
            type("Derived", (kind,), {})


def test_objects_of_the_core_take_no_new_values():
    import numpy as np

    scaling = _core.Scaling(np.zeros(1), np.ones(1))
    mixture = _core.Mixture(np.ones(1), np.zeros((1, 1)), np.ones((1, 1, 1)))
    looked_at = 0
    for one in (scaling, mixture, _core.ColumnSummary(1), _core.Tree(), _core.Sample(1, 1, 1)):
        for name in [name for name in dir(type(one)) if not name.startswith("_")] + ["made_up"]:
            with pytest.raises(AttributeError):
                setattr(one, name, 1)
            looked_at += 1
    assert looked_at > 20


def test_nothing_in_the_binary_is_missing_from_the_stub():
    described = {node.name for node in stub_functions()} | {node.name for node in stub_classes()}
    described |= {
        node.target.id
        for node in stub_tree().body
        if isinstance(node, ast.AnnAssign) and isinstance(node.target, ast.Name)
    }
    public = {name for name in dir(_core) if not name.startswith("_")}
    assert len(public) > 20
    assert public <= described, public - described


def test_every_class_of_the_rust_sources_is_frozen():
    sources = sorted((STUB.parents[2] / "rust" / "py" / "src").rglob("*.rs"))
    found = 0
    for source in sources:
        for line in source.read_text(encoding="utf-8").splitlines():
            if line.lstrip().startswith("#[pyclass"):
                found += 1
                assert "frozen" in line, f"{source.name}: {line.strip()}"
    assert found >= len([node for node in stub_classes() if node.name != "Measure"])


@pytest.mark.parametrize("verb", list(options.VERBS))
def test_signatures_are_the_option_definitions(verb):
    function = getattr(drumlin, verb)
    assert not options.signature_problems(function, verb)
    assert "self" not in inspect.signature(function).parameters


def test_signatures_agree_by_an_independent_look():
    """The same without the package's own helper: names and defaults of `fit`, straight from the dataclasses."""
    groups = (options.Columns, options.TableOptions, options.Shape, options.Search, options.Machine)
    defined = {field.name: field.default for group in groups for field in dataclasses.fields(group)}
    assert len(defined) >= 15
    parameters = inspect.signature(drumlin.fit).parameters
    assert list(parameters)[:2] == ["rows", "components"]
    keywords = {
        name: parameter.default
        for name, parameter in parameters.items()
        if parameter.kind is inspect.Parameter.KEYWORD_ONLY
    }
    assert keywords == defined


def test_option_groups_are_frozen_and_explained():
    looked_at = 0
    for group in (options.Columns, options.TableOptions, options.Shape, options.Search, options.Machine):
        assert dataclasses.is_dataclass(group) and group.__dataclass_params__.frozen
        for field in dataclasses.fields(group):
            text = field.metadata["help"]
            assert text.endswith(".") and "\n" not in text and len(text) > 10, field.name
            looked_at += 1
    assert looked_at >= 15


def test_every_public_name_is_there_and_has_a_docstring():
    assert len(drumlin.__all__) >= 15
    for name in drumlin.__all__:
        value = getattr(drumlin, name)
        if name != "__version__":
            assert inspect.getdoc(value), name
