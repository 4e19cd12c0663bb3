"""Row filters: pyarrow expressions, and the short text that stands for one on the command line.

The text is a comparison of columns with values, joined by `and`, `or`, `not` and brackets:

    weight_kg > 0 and scanner == 'B2'
    day >= '2026-03-01' and kind in ('bag', 'tube') or not `belt speed` < 1.5
    temp is not null and 0 < temp <= 40

A column whose name is not a plain word (or is one like `class`) stands in back-ticks; a quote inside quotes is doubled.
A comparison with a null is neither true nor false, and `not` leaves it so: such a row is not kept, save by `is null`.
Numbers are taken at the width of the column they are compared with, times without a zone in the column's own. The text
is parsed, never run.
"""

from __future__ import annotations

import ast
import datetime
import operator
import re
import unicodedata
from collections.abc import Callable, Iterable, Sequence
from typing import Any, TypeAlias

import pyarrow as pa

from drumlin.errors import OptionError, nearest
from drumlin.tables.numeric import plain, plain_type

__all__ = ["Expression", "as_expression", "check_expression", "evaluate", "parse_where", "referenced"]

Expression: TypeAlias = Any
"""A pyarrow compute expression (pyarrow has no published types)."""

_FUNCTIONS = {"is_null": "is_null", "is_valid": "is_valid", "is_nan": "is_nan", "abs": "abs"}
_ARITHMETIC = {ast.Add: operator.add, ast.Sub: operator.sub, ast.Mult: operator.mul, ast.Div: operator.truediv}
_ZONE = re.compile(r"Z$|\d:\d\d.*[+-]\d\d(:?\d\d)?$")
_HELP = "Write comparisons of columns with values, such as: weight_kg > 0 and scanner == 'B2'."


def as_expression(value: Any, schema: pa.Schema, option: str = "where") -> Expression:
    """Return a filter given as an expression or as text as an expression over the columns of `schema`.

    Raises OptionError naming `option` when it is neither, or the text cannot be understood.
    """
    import pyarrow.compute as pc

    if isinstance(value, pc.Expression):
        return value
    if isinstance(value, str):
        return parse_where(value, schema, option)
    raise OptionError(
        f"{option}: expected a pyarrow compute expression or text, found {type(value).__name__}. {_HELP}", option=option
    )


def parse_where(text: str, schema: pa.Schema, option: str = "where") -> Expression:
    """Turn the text of a row filter into an expression.

    Args:
        text: comparisons (`== != < <= > >= in`, `is null`, `is not null`), `and`, `or`, `not`, brackets, `+ - * /`,
            `is_null() is_nan() abs()`, numbers, quoted text, lists in brackets. Text compared with a date or time
            column is read as a date or time.
        schema: the columns.
        option: the option's name, for messages.

    Raises OptionError with what was found and the place.

    >>> import pyarrow as pa
    >>> parse_where("weight_kg > 0 and scanner == 'B2'", pa.schema({"weight_kg": pa.float64(), "scanner": pa.string()}))
    <pyarrow.compute.Expression ((weight_kg > 0) and (scanner == "B2"))>
    """
    return _Parser(text, schema, option).parse()


def evaluate(batch: pa.RecordBatch, expressions: Sequence[Expression]) -> list[pa.Array]:
    """Return each expression's values for the rows of `batch`, in row order."""
    if not expressions:
        return []
    from pyarrow import acero

    steps = [
        acero.Declaration("table_source", acero.TableSourceNodeOptions(pa.Table.from_batches([plain(batch)]))),
        acero.Declaration(
            "project", acero.ProjectNodeOptions(list(expressions), [str(i) for i in range(len(expressions))])
        ),
    ]
    table = acero.Declaration.from_sequence(steps).to_table(use_threads=False)
    return [_whole(table.column(i), table.schema.field(i).type) for i in range(len(expressions))]


def check_expression(
    expression: Expression, schema: pa.Schema, option: str, require: Callable[[Iterable[str]], None] | None = None
) -> Expression:
    """Return `expression` when it gives true or false over the columns of `schema`.

    `require` is called with the name of an unknown column and should raise; OptionError is raised otherwise.
    """
    empty = pa.RecordBatch.from_arrays([pa.array([], type=field.type) for field in schema], schema=schema)
    try:
        (value,) = evaluate(empty, [expression])
    except (pa.ArrowException, ValueError, TypeError) as error:
        unknown = re.search(r"No match for FieldRef\.Name\((.*)\) in ", str(error))
        if unknown and require is not None:
            require([unknown[1]])
        text = str(error).splitlines()[0]
        shown = " ".join(str(expression).split())
        raise OptionError(f"{option}: {shown} does not fit the columns: {text}", option=option) from error
    if not pa.types.is_boolean(value.type):
        raise OptionError(
            f"{option}: {expression} gives {value.type} values, not true or false. {_HELP}",
            option=option,
        )
    return expression


def referenced(schema: pa.Schema, expression: Expression) -> list[str]:
    """Return the columns that `expression` reads (perhaps a few more), in the order of `schema`."""
    text = str(expression)
    names = [name for name in schema.names if name in text]
    part = pa.schema([schema.field(name) for name in names])
    try:
        check_expression(expression, part, "where")
    except OptionError:
        return list(schema.names)
    return names


def _is_fraction(type_: pa.DataType | None) -> bool:
    return type_ is not None and bool(pa.types.is_floating(type_))


def _is_text(type_: pa.DataType) -> bool:
    return bool(type_ in (pa.string(), pa.large_string()) or pa.types.is_temporal(type_))


def _whole(column: pa.ChunkedArray, type_: pa.DataType) -> pa.Array:
    if column.num_chunks == 1:
        return column.chunk(0)
    return pa.concat_arrays(column.chunks) if column.num_chunks else pa.array([], type=type_)


class _Parser:
    """Walks the tree that Python's own parser makes of the text; only what a filter may hold is let through."""

    def __init__(self, text: str, schema: pa.Schema, option: str) -> None:
        self.text, self.schema, self.option = text, schema, option
        self.quoted: dict[str, str] = {}

    def parse(self) -> Expression:
        source = self._prepare(self.text)
        if not source.strip():
            raise self._error("the text is empty")
        try:
            tree = ast.parse(source.strip(), mode="eval").body
        except (SyntaxError, ValueError, RecursionError, MemoryError) as error:
            reason = getattr(error, "msg", error)
            raise self._error(
                f"cannot be understood ({reason}; a column whose name is no plain word stands in back-ticks)"
            ) from None
        value = self._value(tree)
        if not self._is_expression(value):
            raise self._error("does not mention a column")
        return value

    def _prepare(self, text: str) -> str:
        """Put plain words for back-ticked names and for the SQL ways to say and, or, not and null, outside quotes."""
        out = []
        for part in re.split(r"('(?:[^'\\]|\\.|'')*'|\"(?:[^\"\\]|\\.|\"\")*\"|`[^`]*`)", text):
            if part[:1] in ("'", '"') and len(part) > 1:
                quote = part[0]
                out.append(quote + part[1:-1].replace(2 * quote, "\\" + quote) + quote)
            elif part[:1] == "`" and len(part) > 1:
                word = f"_quoted_{len(self.quoted)}_"
                self.quoted[word] = part[1:-1]
                out.append(word)
            else:
                part = re.sub(r"\b(and|or|not|in|is)\b", lambda m: m[1].lower(), part, flags=re.IGNORECASE)
                part = re.sub(r"\b(is(?:\s+not)?)\s+null\b", r"\1 None", part, flags=re.IGNORECASE)
                part = re.sub(r"\s+", " ", part.replace("<>", "!="))
                out.append(re.sub(r"(?<![=<>!])=(?!=)", "==", part))
        return "".join(out)

    def _value(self, node: ast.AST) -> Any:
        match node:
            case ast.BoolOp(op=op, values=values):
                parts = [self._condition(value) for value in values]
                result = parts[0]
                for part in parts[1:]:
                    result = (result & part) if isinstance(op, ast.And) else (result | part)
                return result
            case ast.UnaryOp(op=ast.Not(), operand=operand):
                return ~self._condition(operand)
            case ast.UnaryOp(op=ast.USub() | ast.UAdd() as sign, operand=operand):
                value = self._value(operand)
                if not self._is_expression(value) and (isinstance(value, bool) or not isinstance(value, (int, float))):
                    raise self._error(f"a sign stands before {value!r}, which is not a number")
                if isinstance(sign, ast.UAdd):
                    return value
                return self._call("negate", value) if self._is_expression(value) else -value
            case ast.Compare(left=left, ops=ops, comparators=others):
                return self._compare(left, ops, others)
            case ast.BinOp(left=left, op=ast.Add() | ast.Sub() | ast.Mult() | ast.Div() as op, right=right):
                a, b = self._alike(
                    left, right, always=isinstance(op, ast.Div)
                )  # a half is a half for whole numbers too
                combined: Expression = _ARITHMETIC[type(op)](a, b)
                return combined
            case ast.Call(func=ast.Name(id=name), args=[argument], keywords=[]) if name in _FUNCTIONS:
                return self._call(_FUNCTIONS[name], self._expression(argument))
            case ast.Name(id=word) if word.lower() in ("true", "false") and word not in self.schema.names:
                return word.lower() == "true"
            case ast.Name(id=name):
                return self._column(self.quoted.get(name, name))
            case ast.Constant(value=value) if isinstance(value, (bool, int, float, str)):
                return value
            case ast.Call(func=ast.Name(id=name)):
                raise self._error(f"knows no function {name!r} of that form (there are {', '.join(_FUNCTIONS)})")
            case _:
                raise self._error(f"cannot hold {ast.unparse(node)!r}")

    def _compare(self, left: ast.AST, ops: list[ast.cmpop], others: list[ast.expr]) -> Any:
        result = None
        for op, right in zip(ops, others, strict=True):
            part = self._one_comparison(left, op, right)
            result = part if result is None else result & part
            left = right
        return result

    def _one_comparison(self, left: ast.AST, op: ast.cmpop, right: ast.expr) -> Any:

        if isinstance(op, ast.Is | ast.IsNot):
            if not (isinstance(right, ast.Constant) and right.value is None):
                raise self._error("`is` goes only with null: x is null, x is not null")
            value = self._expression(left)
            return value.is_null() if isinstance(op, ast.Is) else value.is_valid()
        a = self._value(left)
        if isinstance(op, ast.In | ast.NotIn):
            if not isinstance(right, ast.Tuple | ast.List | ast.Set):
                items = [self._value(right)]
            else:
                items = [self._value(item) for item in right.elts]
            if not self._is_expression(a) or any(self._is_expression(item) for item in items) or not items:
                raise self._error("`in` takes a column at its left and values in brackets at its right")
            found = self._among(a, items, self._type(left))
            return found if isinstance(op, ast.In) else ~found
        b = self._value(right)
        if not self._is_expression(a) and not self._is_expression(b):
            raise self._error(f"{ast.unparse(left)} and {ast.unparse(right)} are compared, and neither is a column")
        a, b = self._alike(left, right)
        match op:
            case ast.Eq():
                return a == b
            case ast.NotEq():
                return a != b
            case ast.Lt():
                return a < b
            case ast.LtE():
                return a <= b
            case ast.Gt():
                return a > b
            case _:
                return a >= b

    def _alike(self, left: ast.AST, right: ast.AST, *, always: bool = False) -> tuple[Expression, Expression]:
        """Both sides as expressions; whole numbers beside a fraction (or `always`) as float64, rounded where too long.

        Left to itself the library takes both for float32 and fails at the first whole number above 16,777,216.
        """
        import pyarrow.compute as pc

        types = [self._type(left), self._type(right)]
        sides = [self._literal(self._value(left), types[1]), self._literal(self._value(right), types[0])]
        fraction = [isinstance(side, float) or _is_fraction(type_) for side, type_ in zip(sides, types, strict=True)]
        found = []
        for side, type_, beside in zip(sides, types, reversed(fraction), strict=True):
            if not self._is_expression(side):
                found.append(pc.scalar(float(side) if always and isinstance(side, int) else side))
            elif (always or beside) and (type_ is None or pa.types.is_integer(type_)):
                found.append(side.cast(pa.float64(), safe=False))
            else:
                found.append(side)
        return found[0], found[1]

    def _among(self, column: Expression, items: list[Any], type_: pa.DataType | None) -> Expression:
        """Whether the column's value is one of the items; null where it is null."""
        import pyarrow.compute as pc

        try:
            values = pa.array([self._literal(item, type_) for item in items])
            if type_ is not None and values.type != type_ and not pa.types.is_floating(values.type):
                if pa.types.is_string(values.type) and not _is_text(type_):
                    raise TypeError(f"text, but the column holds {type_}")
                values = values.cast(type_)
        except (pa.ArrowException, TypeError, ValueError, OverflowError) as error:
            raise self._error(f"the values after `in` do not fit together or the column ({error})") from None
        return pc.if_else(column.is_valid(), column.isin(values), pc.scalar(pa.scalar(None, pa.bool_())))

    def _literal(self, value: Any, type_: pa.DataType | None) -> Any:
        """Read quoted text as a date or time where the column holds such, and numbers at the column's width."""
        if isinstance(value, int | float) and not isinstance(value, bool):
            return self._number(value, type_)
        if not isinstance(value, str) or type_ is None or not pa.types.is_temporal(type_):
            return value
        try:
            if pa.types.is_time(type_):
                return pa.scalar(datetime.time.fromisoformat(value), type_)
            if pa.types.is_timestamp(type_) and type_.tz is not None and not _ZONE.search(value):
                import pyarrow.compute as pc

                return pc.assume_timezone(pa.scalar(value).cast(pa.timestamp(type_.unit)), type_.tz)
            return pa.scalar(value).cast(type_)
        except (pa.ArrowException, ValueError):
            form = "06:30" if pa.types.is_time(type_) else "2026-03-01 or 2026-03-01 06:30"
            raise self._error(f"{value!r} cannot be read as {type_} (write {form})") from None

    def _number(self, value: float, type_: pa.DataType | None) -> Any:
        if isinstance(value, int):
            if type_ == pa.uint64():
                return pa.scalar(value, type_) if 0 <= value < 2**64 else float(value)
            return value if -(2**63) <= value < 2**63 else float(value)
        return pa.scalar(value, type_) if type_ == pa.float32() else value

    def _type(self, node: ast.AST) -> pa.DataType | None:
        if not isinstance(node, ast.Name):
            return None
        name = self._known(self.quoted.get(node.id, node.id))
        if name not in self.schema.names:
            return None
        type_ = self.schema.field(name).type
        return plain_type(type_) or type_

    def _known(self, name: str) -> str:
        """The column that is meant: Python's parser takes some letters for others that look alike."""
        if name in self.schema.names:
            return name
        alike = [one for one in self.schema.names if unicodedata.normalize("NFKC", one) == name]
        return alike[0] if len(alike) == 1 else name

    def _column(self, name: str) -> Expression:
        import pyarrow.compute as pc

        name = self._known(name)
        if name not in self.schema.names:
            raise self._error(
                f"knows no column {name!r}.{nearest(name, self.schema.names)} Text values stand in quotes", column=name
            )
        return pc.field(name)

    def _expression(self, node: ast.AST) -> Expression:
        import pyarrow.compute as pc

        value = self._value(node)
        return value if self._is_expression(value) else pc.scalar(value)

    def _condition(self, node: ast.AST) -> Expression:
        return self._expression(node)

    def _call(self, function: str, value: Expression) -> Expression:
        import pyarrow.compute as pc

        return getattr(pc, function)(value)

    def _is_expression(self, value: Any) -> bool:
        import pyarrow.compute as pc

        return isinstance(value, pc.Expression)

    def _error(self, text: str, **facts: Any) -> OptionError:
        return OptionError(f"{self.option}: {self.text!r} {text}. {_HELP}", option=self.option, **facts)
