"""Numbers and lists as people read them: values with their error in brackets, spins as fractions, percentages."""

import math

from manybody.results.figure_style import spin_text

MINUS = "\N{MINUS SIGN}"
RAISED = str.maketrans("-0123456789", "\N{SUPERSCRIPT MINUS}⁰¹²³⁴⁵⁶⁷⁸⁹")
TIGHT = "\N{NO-BREAK SPACE}"


def number(value, digits=4) -> str:
    """A value to some significant digits, with a true minus sign; "unknown" for NaN."""
    if value is None or not math.isfinite(value):
        return "unknown"
    text = f"{value:.{digits}g}"
    if "e" in text:
        mantissa, power = text.split("e")
        text = f"{mantissa}\N{MULTIPLICATION SIGN}10{str(int(power)).translate(RAISED)}"
    return text.replace("-", MINUS)


def measured(value, error) -> str:
    """A value with its error on the last digits, as 0.7726(2); without digits to spare an error is written out."""
    if not math.isfinite(value):
        return "unknown"
    if not math.isfinite(error):
        return f"{number(value)} (error unknown)"
    if error <= abs(value) * 1e-12:
        return number(value, 10)
    places = -math.floor(math.log10(error))
    digits = round(error * 10**places)
    if digits == 10:
        places, digits = places - 1, 1
    if digits == 1:
        places, digits = places + 1, round(error * 10 ** (places + 1))
    if places < 0 or error > abs(value):
        return f"{number(value, 3)} \N{PLUS-MINUS SIGN} {number(error, 2)}"
    if places > 9:
        return number(value, 10)
    return f"{value:.{places}f}({digits})".replace("-", MINUS)


def percent(value) -> str:
    """A ratio in per cent, two digits."""
    if not math.isfinite(value):
        return "an unknown part"
    digits = 2 if abs(value) < 0.995 else 3
    return f"{number(100 * value, digits)}{TIGHT}%"


def spin(value) -> str:
    """A spin as a fraction, "unknown" for NaN, "beyond any computed range" for infinity."""
    if math.isnan(value):
        return "unknown"
    return "very large" if math.isinf(value) else spin_text(value)


def several(parts) -> str:
    """a, b and c."""
    parts = list(parts)
    return parts[0] if len(parts) == 1 else ", ".join(parts[:-1]) + " and " + parts[-1]


def count(number_of, noun) -> str:
    """1 point, 2 points."""
    return f"{number_of} {noun}" if number_of == 1 else f"{number_of} {noun}s"
