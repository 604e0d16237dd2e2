"""What no test may do: each look yields the line and the fault."""

import ast
from collections.abc import Iterator

from tests.meta.source import dotted, functions

MOCKS = ("mock", "unittest.mock", "pytest_mock")
REPLACING = {"monkeypatch.setattr", "monkeypatch.delattr", "monkeypatch.setitem", "monkeypatch.delitem"}
SKIPS = {"pytest.skip", "pytest.xfail", "pytest.mark.skip", "pytest.mark.skipif", "pytest.mark.xfail"}

Fault = tuple[int, str]


def faults(tree: ast.Module) -> list[Fault]:
    """All faults of one test module, in order of lines."""
    return sorted({*_mocks(tree), *_sleeps(tree), *_empty_checks(tree), *_skips_without_reason(tree)})


def _mocks(tree: ast.Module) -> Iterator[Fault]:
    for node in ast.walk(tree):
        match node:
            case ast.Import(names=names):
                imported = [alias.name for alias in names]
            case ast.ImportFrom(module=str() as module, names=names):
                imported = [module, *(f"{module}.{alias.name}" for alias in names)]
            case _:
                imported = []
        if any(name == mock or name.startswith(f"{mock}.") for name in imported for mock in MOCKS):
            yield node.lineno, "imports a mock library: write a verified fake"  # type: ignore[attr-defined]
        if isinstance(node, ast.arg) and node.arg == "mocker":
            yield node.lineno, "asks for a mock: write a verified fake"
        if isinstance(node, ast.Call) and dotted(node.func) in REPLACING:
            yield node.lineno, "replaces a part of a running program: pass it as an argument"


def _sleeps(tree: ast.Module) -> Iterator[Fault]:
    for node in ast.walk(tree):
        if isinstance(node, ast.Call) and dotted(node.func) == "time.sleep":
            yield node.lineno, "sleeps: use virtual time or wait for an event"
        if (
            isinstance(node, ast.ImportFrom)
            and node.module == "time"
            and "sleep" in {alias.name for alias in node.names}
        ):
            yield node.lineno, "imports sleep: use virtual time or wait for an event"


def _empty_checks(tree: ast.Module) -> Iterator[Fault]:
    for node in ast.walk(tree):
        if isinstance(node, ast.Assert) and _always_holds(node.test):
            yield node.lineno, "asserts what always holds"
    for function in functions(tree):
        if function.name.startswith("test_") and all(_does_nothing(statement) for statement in function.body):
            yield function.lineno, "is an empty test"


def _always_holds(test: ast.expr) -> bool:
    match test:
        case ast.Constant(value=constant):
            return bool(constant)
        case ast.Tuple(elts=elements):
            return bool(elements)
        case ast.Compare(left=left, ops=[ast.Eq() | ast.Is() | ast.LtE() | ast.GtE()], comparators=[right]):
            return ast.dump(left) == ast.dump(right) and isinstance(left, ast.Name | ast.Attribute | ast.Constant)
        case ast.BoolOp(op=ast.Or(), values=operands):
            return any(_always_holds(operand) for operand in operands)
        case _:
            return False


def _does_nothing(statement: ast.stmt) -> bool:
    return isinstance(statement, ast.Pass) or (
        isinstance(statement, ast.Expr) and isinstance(statement.value, ast.Constant)
    )


def _skips_without_reason(tree: ast.Module) -> Iterator[Fault]:
    called = {id(node.func) for node in ast.walk(tree) if isinstance(node, ast.Call)}
    for node in ast.walk(tree):
        if isinstance(node, ast.Call) and (name := dotted(node.func)) in SKIPS:
            reasons = [keyword.value for keyword in node.keywords if keyword.arg == "reason"]
            if not _says_something(reasons if name.startswith("pytest.mark.") else [*node.args, *reasons]):
                yield node.lineno, f"{name} without a reason"
        elif isinstance(node, ast.Attribute) and id(node) not in called and (name := dotted(node)) in SKIPS:
            yield node.lineno, f"{name} without a reason"


def _says_something(reasons: list[ast.expr]) -> bool:
    return any(not (isinstance(reason, ast.Constant) and not reason.value) for reason in reasons)
