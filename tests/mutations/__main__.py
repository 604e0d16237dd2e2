"""Would the tests notice?  ``python -m tests.mutations [NAME ...] [--json]`` plants one grave mistake at a time.

Each mistake is a small change of text in a copy of the tree, after which the tests named with it must fail.  A text
that no longer stands in its file exactly once is an error: then the mistake has to be planted anew.  Exits with 1
when a mistake goes unnoticed or can't be planted.  About ten seconds a mistake.
"""

import argparse
import json
import os
import shutil
import subprocess
import sys
import tempfile
from collections.abc import Sequence
from dataclasses import dataclass
from pathlib import Path

from tests.mutations.mistakes import MISTAKES, Mistake

ROOT = Path(__file__).parents[2]
COPIED = ("autotune", "simulator", "tests", "config", "pyproject.toml", "README.md", "DEVELOPERS.md")
FAILED = 1
LONGEST_S = 600.0


class NotPlanted(Exception):
    """Means: the text of a mistake doesn't stand in its file exactly once.  Do: write it anew for today's code."""


@dataclass(frozen=True, slots=True)
class Seen:
    """Whether the tests noticed a mistake, and which one did, or what they said instead."""

    name: str
    is_noticed: bool
    by: str


def plant(mistake: Mistake, tree: Path) -> None:
    """Change the tree; raises ``NotPlanted``."""
    for change in mistake.changes:
        file = tree / change.file
        text = file.read_text("utf-8")
        if text.count(change.old) != 1:
            raise NotPlanted(f"{mistake.name}: {text.count(change.old)} times in {change.file}: {change.old!r}")
        file.write_text(text.replace(change.old, change.new), "utf-8")


def try_one(mistake: Mistake, folder: Path) -> Seen:
    """Plant one mistake in a fresh copy of the tree and run its tests."""
    tree = folder / "tree"
    shutil.rmtree(tree, ignore_errors=True)
    tree.mkdir(parents=True)
    for name in COPIED:
        if (ROOT / name).is_dir():
            shutil.copytree(ROOT / name, tree / name, ignore=shutil.ignore_patterns("__pycache__"))
        else:
            shutil.copy2(ROOT / name, tree / name)
    plant(mistake, tree)
    return _run_tests(mistake, tree)


def _run_tests(mistake: Mistake, tree: Path) -> Seen:
    """Noticed is what makes a test fail; tests that can't be collected or that don't exist notice nothing."""
    command = [sys.executable, "-m", "pytest", "-q", "-x", "-p", "no:cacheprovider", "--tb=line", "-rf", *mistake.tests]
    # The copy goes before the installed tree, so that what runs is what was changed.
    ended = subprocess.run(
        command, cwd=tree, env=_environment(tree), capture_output=True, text=True, timeout=LONGEST_S, check=False
    )
    lines = ended.stdout.strip().splitlines() or [ended.stderr.strip()[-200:]]
    failures = [line.removeprefix("FAILED ") for line in lines if line.startswith("FAILED ")]
    is_noticed = ended.returncode == FAILED and bool(failures)
    return Seen(mistake.name, is_noticed, (failures or lines)[-1])


def _environment(tree: Path) -> dict[str, str]:
    return os.environ | {"PYTHONPATH": str(tree), "PYTHONDONTWRITEBYTECODE": "1"}


def main(arguments: Sequence[str] | None = None) -> int:
    """Try all mistakes, or those whose names contain one of the words given."""
    parser = argparse.ArgumentParser(prog="python -m tests.mutations", description=__doc__)
    parser.add_argument("words", nargs="*", metavar="NAME", help="only mistakes whose name contains one of these")
    parser.add_argument("--json", action="store_true", help="one JSON object on standard output")
    chosen = parser.parse_args(arguments)
    wanted = [one for one in MISTAKES if not chosen.words or any(word in one.name for word in chosen.words)]
    seen: list[Seen] = []
    with tempfile.TemporaryDirectory(prefix="mutations-") as folder:
        for mistake in wanted:
            seen.append(try_one(mistake, Path(folder)))
            word = "noticed" if seen[-1].is_noticed else "NOT NOTICED"
            print(f"{word:12} {mistake.name}: {seen[-1].by}", file=sys.stderr, flush=True)
    if chosen.json:
        print(json.dumps({one.name: one.is_noticed for one in seen}))
    return 0 if seen and all(one.is_noticed for one in seen) else 1


if __name__ == "__main__":
    sys.exit(main())
