"""Which numbers of the pure rooms carry no unit in their name.

Looked at: the fields of every public class, and the parameters and returns of every public function,
whose annotation is a float or an ``Interval``, bare, optional or in a tuple, list or sequence.
"""

import ast
from collections.abc import Iterator

UNITS = (
    "s", "ms", "min",  # time
    "pct", "eu",  # percent of span; engineering units
    "rad", "deg", "rad_per_s",  # angle and frequency
    "pct_per_s", "eu_per_s", "per_s", "per_min",  # rates
    "pct_s", "db",  # error integrals; decibels
)  # fmt: skip

DIMENSIONLESS = (
    "gain", "gain_per_s",  # %OP/%PV or %PV/%OP, as the docstring says; an integrating process' per second
    "ratio", "factor",  # one thing over another of its kind
    "level", "confidence",  # claimed coverage
    "weight",  # 0 .. 1
    "sensitivity",  # peak of |S| or |T|
    "number",  # in a controller's settings field, in that field's own unit
)  # fmt: skip

QUALIFIERS = ("at_most", "at_least", "low", "high", "best")

HOLDERS = {"tuple", "list", "Sequence", "Iterable", "Iterator", "Optional", "frozenset", "set"}


def has_unit(name: str) -> bool:
    """Whether the name ends in a unit or a dimensionless word, before any of the qualifiers."""
    bare = name.strip("_")
    for qualifier in QUALIFIERS:
        bare = bare.removesuffix(f"_{qualifier}")
    return any(bare == word or bare.endswith(f"_{word}") for word in UNITS + DIMENSIONLESS)


def is_number(annotation: ast.expr | None) -> bool:
    """Whether the annotation is a float or an ``Interval``, optional or held in a plain container."""
    match annotation:
        case ast.Name(id="float" | "Interval"):
            return True
        case ast.Constant(value=str() as written):
            return is_number(ast.parse(written, mode="eval").body)
        case ast.BinOp(left=left, op=ast.BitOr(), right=right):
            return is_number(left) or is_number(right)
        case ast.Subscript(value=ast.Name(id=holder), slice=inner) if holder in HOLDERS:
            elements = inner.elts if isinstance(inner, ast.Tuple) else [inner]
            return any(is_number(element) for element in elements)
        case _:
            return False


def numbers_without_unit(tree: ast.Module) -> Iterator[str]:
    """The place of each such number: ``Class.field``, ``function(parameter)`` or ``function -> float``."""
    yield from _in_body(tree.body, "")


def _in_body(body: list[ast.stmt], prefix: str) -> Iterator[str]:
    for node in body:
        if isinstance(node, ast.ClassDef | ast.FunctionDef | ast.AsyncFunctionDef) and node.name.startswith("_"):
            continue
        if isinstance(node, ast.ClassDef):
            yield from _in_body(node.body, f"{prefix}{node.name}.")
        elif isinstance(node, ast.AnnAssign) and isinstance(node.target, ast.Name):
            if is_number(node.annotation) and not has_unit(node.target.id):
                yield f"{prefix}{node.target.id}"
        elif isinstance(node, ast.FunctionDef | ast.AsyncFunctionDef):
            yield from _in_signature(node, f"{prefix}{node.name}")


def _in_signature(node: ast.FunctionDef | ast.AsyncFunctionDef, place: str) -> Iterator[str]:
    for parameter in (*node.args.posonlyargs, *node.args.args, *node.args.kwonlyargs):
        if is_number(parameter.annotation) and not has_unit(parameter.arg):
            yield f"{place}({parameter.arg})"
    if is_number(node.returns) and not has_unit(node.name):
        yield f"{place} -> float"
