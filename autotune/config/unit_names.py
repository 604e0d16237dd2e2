"""Engineering units: how the trade writes them, by their UN/ECE common code (Recommendation 20)."""

_WORDS: dict[str, tuple[str, ...]] = {
    "BAR": ("bar",),
    "PAL": ("Pa",),
    "KPA": ("kPa",),
    "MTQ": ("m3", "m³"),
    "MQH": ("m3/h", "m³/h"),
    "LTR": ("l", "L"),
    "L2": ("l/min", "L/min"),
    "SEC": ("s",),
    "MIN": ("min",),
    "RPM": ("r/min", "rpm", "1/min"),
    "KGM": ("kg",),
    "KGS": ("kg/s",),
    "AMP": ("A",),
    "4K": ("mA",),
    "VLT": ("V",),
    "HTZ": ("Hz",),
    "C62": ("1", "-", ""),
    "MMT": ("mm",),
    "CEL": ("degC", "°C", "deg C", "C"),
    "KEL": ("K",),
    "FAH": ("degF", "°F", "deg F", "F"),
    "P1": ("%",),
}


def common_code(unit_id: int) -> str:
    """The code whose characters make up a unit's id (OPC 10000-8, EUInformation); empty where there are none."""
    if unit_id <= 0:
        return ""
    octets = unit_id.to_bytes((unit_id.bit_length() + 7) // 8, "big")
    return octets.decode("ascii") if octets.isascii() else ""


def is_same_unit(told: str, unit_id: int | None, shown: str) -> bool | None:
    """Whether a file's unit is the one that a server tells by id and text; ``None`` where that can't be known."""
    words = _WORDS.get(common_code(unit_id or 0))
    if words is not None and told in words:
        return True
    if shown and _plain(told) == _plain(shown):
        return True
    if words is not None:
        return False
    return None if not shown or not told else False


def _plain(unit: str) -> str:
    return unit.replace(" ", "").replace("°", "deg").replace("³", "3").casefold()
