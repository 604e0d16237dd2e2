"""The repository speaks of itself alone, and fetches from nowhere by address."""

import re

import pytest

from tests.meta.source import name_of, text_of, texts

# One letter in brackets each, so that this file does not find itself.
FOREIGN = re.compile(
    r"""
      (?i:\bissue\ ?[#]?\d)                     # a tracker's number
    | /wor[k]/ | (?i:\bper\ the\ brie[f]\b)
    | \bCE[O]\b | (?i:\bhelper\ agen[t]) | (?i:\bsub-?agen[t]) | (?i:\bthis\ workplac[e]\b) | (?i:\bthe\ missio[n]\b)
    | \bClaud[e]\b | \bAnthropi[c]\b | \bLL[M]s?\b | (?i:\blanguage\ mode[l]) | (?i:\bAI\ assistan[t])
    | (?i:\bmileston[e]) | (?i:\backnowledged\ tas[k]) | (?i:\bcontract\ give[n]\b)
    | \b(DESIGN|METHODS|LINKS|CHECKS|STYLE)\.m[d]\b
    """,
    re.VERBOSE,
)
REGISTRIES = re.compile(
    r"pypi\.or[g]|pythonhosted\.or[g]|npmjs\.(com|or[g])|crates\.i[o]|anaconda\.or[g]|docker\.i[o]|file:///op[t]"
)


def _found(pattern: re.Pattern[str]) -> list[str]:
    return [
        f"{name_of(path)}:{number}: {match.group()}"
        for path in texts()
        for number, line in enumerate(text_of(path).splitlines(), start=1)
        if (match := pattern.search(line))
    ]


def test_the_walk_over_the_texts_reaches_every_kind() -> None:
    names = {name_of(path) for path in texts()}
    assert {"pyproject.toml", ".ci/run", "autotune/errors.py", "tests/meta/test_words.py", "LICENSE"} <= names


def test_no_text_speaks_of_how_it_came_about() -> None:
    assert not (found := _found(FOREIGN)), "\n".join(found)


def test_no_text_names_the_address_of_a_package_registry() -> None:
    assert not (found := _found(REGISTRIES)), "\n".join(found)


@pytest.mark.parametrize(
    "line",
    [f"see issue #{12}", f"Issue {7}", f"in /{'work'}/main", f"as {'DESIGN'}.md says", f"the {'C'}EO"],
)
def test_a_foreign_word_is_seen(line: str) -> None:
    assert FOREIGN.search(line)


@pytest.mark.parametrize(
    "line", ["the issuer of the certificate", "issue a command", "a brief test", "the transmission", "work/main"]
)
def test_a_word_of_the_trade_is_left_alone(line: str) -> None:
    assert not FOREIGN.search(line)


def test_a_registry_is_seen() -> None:
    assert REGISTRIES.search(f"pip install --index-url https://{'pypi'}.org/simple")
