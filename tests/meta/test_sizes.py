"""Small rooms: a module past 400 lines needs a written reason."""

from tests.meta.source import modules, name_of, text_of

LINES_AT_MOST = 400

REASONS: dict[str, str] = {}


def _long_modules() -> dict[str, int]:
    lengths = {name_of(path): len(text_of(path).splitlines()) for path in modules("autotune", "simulator")}
    assert lengths
    return {name: lines for name, lines in lengths.items() if lines > LINES_AT_MOST}


def test_every_long_module_has_a_written_reason() -> None:
    without_reason = {name: lines for name, lines in _long_modules().items() if not REASONS.get(name)}
    assert not without_reason, f"divide them, or say why not in REASONS: {without_reason}"


def test_every_reason_is_still_needed() -> None:
    assert REASONS.keys() <= _long_modules().keys()
