"""The files that come with the program."""

from pathlib import Path

from autotune.config.complaints import meant, shown
from autotune.errors import Complaint, ConfigError

_ROOM = Path(__file__).resolve().parent
_FOLDERS = (_ROOM.parents[1] / "config", _ROOM.parent / "bundled_config")


def bundled_path(name: str) -> Path:
    """The path of ``rehearsal.toml``, ``example-modbus.toml``, ``site-limits.toml`` or ``plc-guard.st``.

    Found beside the source tree or inside an installed wheel.  Raises ``ConfigError`` for any other name.
    """
    known = {
        path.name: path
        for folder in reversed(_FOLDERS)
        if (folder / "rehearsal.toml").is_file()
        for path in folder.iterdir()
        if path.is_file()
    }
    if name in known:
        return known[name]
    listed = ", ".join(sorted(known)) or "no file; install the program again"
    remedy = f"{meant(name, sorted(known))}there are: {listed}"
    raise ConfigError((Complaint("(bundled files)", shown(name), "no such file comes with the program", remedy),))
