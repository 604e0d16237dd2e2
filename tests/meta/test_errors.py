"""Every exception has the one root and says what it means and what to do."""

import ast
import builtins

from tests.meta.source import classes, dotted, modules, name_of, tree_of

ROOT_CLASS = "AutotuneError"
BUILT_IN = {name for name, kind in vars(builtins).items() if isinstance(kind, type) and issubclass(kind, BaseException)}


def _own_exceptions(*trees: ast.Module) -> dict[str, ast.ClassDef]:
    """Every class that has an exception among its ancestors, by name."""
    known = {node.name: node for tree in trees for node in classes(tree)}
    bases = {name: {dotted(base).rpartition(".")[2] for base in node.bases} for name, node in known.items()}
    exceptions = set(BUILT_IN)
    while found := {name for name in known if name not in exceptions and bases[name] & exceptions}:
        exceptions |= found
    return {name: node for name, node in known.items() if name in exceptions - BUILT_IN}


def _of_autotune() -> dict[str, ast.ClassDef]:
    return _own_exceptions(*(tree_of(path) for path in modules("autotune")))


def test_every_exception_says_what_it_means_and_what_to_do() -> None:
    silent = [
        name
        for name, node in _of_autotune().items()
        if not {"Means:", "Do:"} <= set((ast.get_docstring(node) or "").split())
    ]
    assert not silent, silent


def test_the_root_is_the_only_exception_without_an_own_parent() -> None:
    orphans = [
        name
        for name, node in _of_autotune().items()
        if {dotted(base).rpartition(".")[2] for base in node.bases} & BUILT_IN
    ]
    assert orphans == [ROOT_CLASS]


def test_every_exception_lives_in_the_one_module_of_errors() -> None:
    astray = [name_of(path) for path in modules("autotune") if _own_exceptions(tree_of(path))]
    assert astray == ["autotune/errors.py"]


def test_an_exception_is_found_through_its_ancestors() -> None:
    tree = ast.parse("class A(errors.B): ...\nclass B(OSError): ...\nclass C(Enum): ...\nclass D: ...")
    assert set(_own_exceptions(tree)) == {"A", "B"}
