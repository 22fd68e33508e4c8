"""How numbers, errors, units and places are written, the same in tables and figures."""

import math
from decimal import Decimal

_PREFIXES = {
    -18: "a",
    -15: "f",
    -12: "p",
    -9: "n",
    -6: "µ",
    -3: "m",
    0: "",
    3: "k",
    6: "M",
    9: "G",
    12: "T",
}
_MAX_DIGITS = 10  # of a value: more would be noise of the arithmetic
ROUNDING = 1e-9  # relative errors below are those of the arithmetic
_PLAIN = (1e-4, 1e7)  # values outside are written with a power of ten
_MICROMETRE_FROM_NM = 5000.0  # a longer channel is described in µm


def format_estimate(value: float, error: float | None, unit: str = "") -> str:
    """Write a value with its error: '12.906 ± 0.021 kΩ'.

    The error is rounded to two significant digits and the value to the same decimal; both are in
    `unit`. Without a usable error (None, nan) the value has six digits and the error reads n/a; a
    value without any error reads '12.9064 kΩ exact'.
    """
    tail = f" {unit}" if unit else ""
    if value is None or math.isnan(value):
        return "n/a"
    if math.isinf(value):
        return f"{'-' if value < 0 else ''}infinite{tail}"
    if error is None or math.isnan(error):
        return f"{format_number(value)} ± n/a{tail}"
    if math.isinf(error):
        return f"{format_number(value)} ± infinite{tail}"
    error = abs(error)
    if error == 0.0:
        return f"{format_number(value)}{tail} exact"
    largest = max(abs(value), error)
    if not _PLAIN[0] <= largest < _PLAIN[1]:
        power = _exponent(largest, 2)
        scaled = _plain_estimate(_shift(value, -power), _shift(error, -power))
        return f"({scaled})e{power:+03d}{tail}"
    return _plain_estimate(value, error) + tail


def _plain_estimate(value: float, error: float) -> str:
    decimals = 1 - _exponent(error, 2)
    if abs(value) > 0.0 and _exponent(value, 2) + decimals + 1 > _MAX_DIGITS:
        return f"{_fixed(value, _MAX_DIGITS - 1 - _exponent(value, 2))} ± {error:.1e}"
    return f"{_fixed(value, decimals)} ± {_fixed(error, decimals)}"


def _fixed(value: float, decimals: int) -> str:
    text = f"{round(value, decimals):.{max(decimals, 0)}f}"
    return text[1:] if text.startswith("-") and float(text) == 0.0 else text


def _exponent(value: float, digits: int) -> int:
    """Power of ten of `value` after rounding to `digits`: 0.0996 to two digits is 1.0e-01."""
    return int(f"{abs(value):.{digits - 1}e}".rpartition("e")[2])


def _shift(value: float, power: int) -> float:
    return float(Decimal(value).scaleb(power))


def format_number(value: float | None, unit: str = "", digits: int = 6) -> str:
    """Write a number without an error to `digits` significant digits: '12906.4 Ω'."""
    tail = f" {unit}" if unit else ""
    if value is None or math.isnan(value):
        return "n/a"
    if math.isinf(value):
        return f"{'-' if value < 0 else ''}infinite{tail}"
    if value == 0.0:
        return f"0{tail}"
    if not _PLAIN[0] <= abs(value) < _PLAIN[1]:
        mantissa, _, power = f"{value:.{digits - 1}e}".partition("e")
        mantissa = mantissa.rstrip("0").rstrip(".") if "." in mantissa else mantissa
        return f"{mantissa}e{power}{tail}"
    text = f"{value:.{max(digits - 1 - _exponent(value, digits), 0)}f}"
    text = text.rstrip("0").rstrip(".") if "." in text else text
    return text + tail


def unit_scale(value: float, unit: str) -> tuple[float, str]:
    """Factor and prefixed unit that bring `value` (in `unit`) to between 1 and 1000.

    12906 in Ω gives (1e-3, 'kΩ'). Zero and non-finite values keep the unit as it is.
    """
    if value == 0.0 or not math.isfinite(value):
        return 1.0, unit
    power = 3 * math.floor(_exponent(value, 5) / 3)
    power = min(max(power, min(_PREFIXES)), max(_PREFIXES))
    return 10.0**-power, _PREFIXES[power] + unit


def format_scaled(value: float | None, error: float | None, unit: str, digits: int = 6) -> str:
    """format_estimate with a prefix that fits the value; without error (None) the value alone.

    An error below 1e-9 of the value is rounding of a number that is exact.
    """
    if value is None:
        return "n/a"
    if error is not None and abs(error) < ROUNDING * abs(value):
        error = 0.0
    reference = value
    if error is not None and math.isfinite(error):
        reference = max(abs(value), abs(error))
    factor, unit = unit_scale(reference, unit)
    if error is None:
        return format_number(value * factor, unit, digits)
    return format_estimate(value * factor, error * factor, unit)


def format_share(value: float, whole: float) -> str:
    """Write value/whole in per cent with one decimal; '< 0.1 %' for what would read as nothing."""
    if whole == 0.0 or not math.isfinite(value) or not math.isfinite(whole):
        return "n/a"
    share = 100.0 * value / whole
    return "< 0.1 %" if 0.0 < share < 0.05 else f"{_fixed(share, 1)} %"


def format_count(count: float) -> str:
    """Write a count shortly: 950, 12.3 thousand, 4.00 million, 1.20 billion."""
    for size, word in ((1e9, "billion"), (1e6, "million"), (1e4, "thousand")):
        if count >= 0.9995 * size:
            number = count / (1e3 if word == "thousand" else size)
            return f"{number:.4g} {word}" if number >= 100.0 else f"{number:.3g} {word}"
    return f"{count:.0f}"


def format_seconds(seconds: float) -> str:
    """Write a duration: 0.42 s, 12 s, 3 min 20 s, 2 h 05 min."""
    if seconds < 10.0:
        return f"{seconds:.2g} s"
    if seconds < 99.5:
        return f"{seconds:.0f} s"
    minutes, rest = divmod(round(seconds), 60)
    if minutes < 100:
        return f"{minutes} min {rest:02d} s"
    return f"{minutes // 60} h {minutes % 60:02d} min"


def length_scale(length_nm: float) -> tuple[float, str]:
    """Factor and unit in which a channel of this length is described: nm, or µm when long."""
    return (1e-3, "µm") if length_nm >= _MICROMETRE_FROM_NM else (1.0, "nm")


def format_place(part, length_nm: float) -> str:
    """Write where a part of the resistance sits: '40 nm', or '0 – 40 nm' for a piece."""
    factor, unit = length_scale(length_nm)
    if part.position_nm is not None:
        return f"{format_number(part.position_nm * factor, digits=5)} {unit}"
    if part.from_nm is None or part.to_nm is None:
        return ""
    start, end = (format_number(place * factor, digits=5) for place in (part.from_nm, part.to_nm))
    return f"{start} – {end} {unit}"


def order_parts(parts, length_nm: float) -> list:
    """Parts of the resistance as a carrier meets them from left to right."""

    def key(part):
        if part.position_nm is None:
            return (part.from_nm or 0.0, 2)
        at_right_end = part.position_nm >= length_nm
        if part.kind == "interface":
            return (part.position_nm, 3 if at_right_end else 0)
        return (part.position_nm, 1)

    return sorted(parts, key=key)


def group_name(group):
    """Name of a PartSum, such as '12 scatterers' or 'elastic, 301 pieces'."""
    words = {"point": "scatterer", "probe": "probe"}.get(group.kind, "piece")
    words = f"{group.count} {words}" + "s" * (group.count != 1)
    return f"{group.mechanism}, {words}" if group.mechanism else words


def split_parts(parts, limit: int, keep: int) -> tuple[list, list]:
    """The parts to show one by one, in their order, and the rest: at most `limit`, else the
    `keep` largest. Parts of no resistance at all (ballistic pieces) come to neither list.
    """
    total = abs(sum(part.resistance_ohm.value for part in parts))
    shown = [part for part in parts if _matters(part.resistance_ohm, total)]
    if len(shown) <= limit:
        return shown, []
    ranks = sorted(range(len(shown)), key=lambda i: -abs(shown[i].resistance_ohm.value))
    largest = set(ranks[:keep])
    return (
        [part for i, part in enumerate(shown) if i in largest],
        [part for i, part in enumerate(shown) if i not in largest],
    )


def _matters(estimate, total: float) -> bool:
    error = estimate.error
    error = 0.0 if error is None or not math.isfinite(error) else error
    return max(abs(estimate.value), error) > 1e-9 * total


_ASCII = str.maketrans(
    {
        "±": "+-",
        "Ω": "ohm",
        "µ": "u",
        "μ": "mu",
        "₊": "+",
        "₋": "-",
        "₀": "0",
        "–": "-",
        "—": "-",
        "−": "-",
        "≈": "~",
        "·": "*",
        "×": "x",
        "²": "^2",
        "³": "^3",
        "…": "...",
        "λ": "lambda",
        "π": "pi",
        "σ": "sigma",
        "≤": "<=",
        "≥": ">=",
    }
)


def ascii_text(text: str) -> str:
    """The same text in ASCII: '12.906 +- 0.021 kohm'; accents are dropped, the rest becomes '?'."""
    if text.isascii():
        return text
    import unicodedata

    text = unicodedata.normalize("NFKD", text.translate(_ASCII).replace("ß", "ss"))
    text = "".join(sign for sign in text if not unicodedata.combining(sign))
    return text.encode("ascii", "replace").decode("ascii")
