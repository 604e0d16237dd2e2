"""Digests tell a changed meaning from a changed look."""

import hashlib
import tomllib
from pathlib import Path

import pytest

from autotune.config.bundled import bundled_path
from autotune.config.digest import digest_of
from autotune.config.load import load
from autotune.config.types import Configuration
from tests.config.toml_text import to_toml

REHEARSAL = bundled_path("rehearsal.toml")


def test_comments_spaces_and_the_order_of_keys_do_not_count(tmp_path: Path) -> None:
    document = tomllib.loads(REHEARSAL.read_text("utf-8"))
    path = tmp_path / "other-look.toml"
    path.write_text("# nothing of it is left\n\n" + to_toml(_reversed(document)), "utf-8")
    again, first = load(path), load(REHEARSAL)
    assert again.digest == first.digest
    assert {loop.name: loop.digest for loop in again.loops} == {loop.name: loop.digest for loop in first.loops}
    assert again.sources != first.sources


def _reversed(content: object) -> object:
    if isinstance(content, dict):
        return {key: _reversed(part) for key, part in reversed(content.items())}
    if isinstance(content, list) and content and isinstance(content[0], dict):
        return [_reversed(part) for part in content]
    return content


def test_a_whole_number_is_the_same_as_its_decimal(tmp_path: Path) -> None:
    path = tmp_path / "whole.toml"
    path.write_text(REHEARSAL.read_text("utf-8").replace("step_up_pct = 15.0", "step_up_pct = 15"), "utf-8")
    assert load(path).digest == load(REHEARSAL).digest


@pytest.mark.parametrize(
    ("key", "content", "changed"),
    [
        ("loop.TIC-204.limits.step_up_pct", 14.0, {"TIC-204"}),
        ("loop.TIC-204.service", "another service", {"TIC-204"}),
        ("loop.TIC-204.tags.pv.address", 60, {"TIC-204"}),
        ("block.ideal-seconds.derivative_filter_ratio", 8.0, {"TIC-204"}),
        ("controller.skid.plc_scan_s", 0.06, {"TIC-204", "PIC-110", "FIC-101", "LIC-102", "TIC-310", "TIC-311"}),
    ],
)
def test_whatever_is_meant_counts(key: str, content: str | float, changed: set[str]) -> None:
    first, other = load(REHEARSAL), load(REHEARSAL, {key: content})
    assert {loop.name for loop in other.loops if loop.digest != _digest(first, loop.name)} == changed
    assert other.digest != first.digest


def _digest(configuration: Configuration, name: str) -> str:
    loop = configuration.loop(name)
    assert loop is not None
    return loop.digest


def test_a_block_has_the_same_digest_in_every_loop_and_a_new_one_when_it_changes() -> None:
    def blocks(overrides: dict[str, str | int | float | bool]) -> dict[str, str]:
        return {loop.name: loop.block_digest for loop in load(REHEARSAL, overrides).loops}

    first = blocks({})
    assert len(set(first.values())) == 6
    assert blocks({"loop.LIC-102.block": "ideal-seconds"})["LIC-102"] == first["TIC-204"]
    assert blocks({"block.ideal-seconds.setpoint_weight": 0.9})["TIC-204"] != first["TIC-204"]
    assert blocks({"loop.TIC-204.scan_s": 0.2})["TIC-204"] == first["TIC-204"]


def test_sources_are_the_bytes_of_every_file() -> None:
    example = load(bundled_path("example-modbus.toml"))
    expected = {
        name: hashlib.sha256(bundled_path(name).read_bytes()).hexdigest()
        for name in ("example-modbus.toml", "site-limits.toml")
    }
    assert {Path(file).name: digest for file, digest in example.sources} == expected


def test_the_site_s_ceilings_are_part_of_a_loop(tmp_path: Path) -> None:
    for name in ("example-modbus.toml", "site-limits.toml"):
        (tmp_path / name).write_bytes(bundled_path(name).read_bytes())
    first = load(tmp_path / "example-modbus.toml")
    site = tmp_path / "site-limits.toml"
    site.write_text(site.read_text("utf-8").replace("factor_at_most = 5.0", "factor_at_most = 4.0"), "utf-8")
    assert load(tmp_path / "example-modbus.toml").digest != first.digest


def test_the_canonical_text_is_plain_json() -> None:
    # SHA-256 of {"a":1.5,"b":["x",null]}, as sha256sum(1) gives it.
    text = b'{"a":1.5,"b":["x",null]}'
    assert digest_of({"b": ("x", None), "a": 1.5}) == hashlib.sha256(text).hexdigest()


def test_what_is_no_number_has_no_digest() -> None:
    with pytest.raises(ValueError, match="not JSON compliant"):
        digest_of({"a": float("nan")})
