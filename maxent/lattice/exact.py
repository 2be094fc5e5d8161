"""Numbers of formulas: exact as long as they can be, and their printed form.

Floor: lattice (standard library only). A real number is an int or a Fraction while it is exact (literals,
the factors of the operator tables) and a float once a root, a logarithm or the like has touched it; a
complex number is a pair (real, imaginary). Must not know parameters or operators.
"""

from __future__ import annotations

import cmath
import math
from fractions import Fraction

Real = int | Fraction | float
Complex = tuple[Real, Real]

EPS = 2.0**-52
_MOST_BITS = 1000
ZERO: Complex = (0, 0)
ONE: Complex = (1, 0)


def real_plus(a: Real, b: Real) -> Real:
    """Add two reals; floats that cancel up to 8 units in the last place give an exact 0."""
    total = a + b
    if isinstance(total, float) and abs(total) <= 8 * EPS * max(abs(float(a)), abs(float(b))):
        return 0
    return _tidy(total)


def real_times(a: Real, b: Real) -> Real:
    """Multiply two reals; a zero stays exact, and a fraction that grows too long becomes a float."""
    return 0 if a == 0 or b == 0 else _tidy(a * b)


def _tidy(value: Real) -> Real:
    """Keep the simplest kind of number; raises OverflowError beyond the range of floats."""
    if isinstance(value, float):
        if math.isinf(value):
            raise OverflowError("a number leaves the range of floating point")
        return value
    if isinstance(value, Fraction) and value.denominator == 1:
        value = value.numerator
    if max(value.numerator.bit_length(), value.denominator.bit_length()) > _MOST_BITS:
        return float(value)
    return value


def plus(a: Complex, b: Complex) -> Complex:
    """Sum."""
    return real_plus(a[0], b[0]), real_plus(a[1], b[1])


def times(a: Complex, b: Complex) -> Complex:
    """Product."""
    if a[1] == 0 and b[1] == 0:
        return real_times(a[0], b[0]), 0
    real = real_plus(real_times(a[0], b[0]), -real_times(a[1], b[1]))
    imag = real_plus(real_times(a[0], b[1]), real_times(a[1], b[0]))
    return real, imag


def inverse(a: Complex) -> Complex:
    """Reciprocal.

    Raises
    ------
    ZeroDivisionError
        When the number is zero.
    """
    size = real_plus(real_times(a[0], a[0]), real_times(a[1], a[1]))
    if size == 0:
        raise ZeroDivisionError("division by zero")
    scale: Real = 1 / size if isinstance(size, float) else Fraction(1) / size
    return real_times(a[0], scale), real_times(-a[1], scale)


def power(a: Complex, exponent: int) -> Complex:
    """Integer power by repeated squaring."""
    base = inverse(a) if exponent < 0 else a
    result = ONE
    for bit in bin(abs(exponent))[2:]:
        result = times(result, result)
        if bit == "1":
            result = times(result, base)
    return result


def to_complex(a: Complex) -> complex:
    """Nearest floating-point value."""
    return complex(float(a[0]), float(a[1]))


def from_complex(value: complex, noise: float = 0.0) -> Complex:
    """Wrap a float or complex; parts not above `noise` are rounding and become an exact 0."""
    real: Real = 0 if abs(value.real) <= noise else value.real
    imag: Real = 0 if abs(value.imag) <= noise else value.imag
    return real, imag


def apply(name: str, a: Complex) -> Complex:
    """Value of one of the functions of the formula language at a number.

    Parameters
    ----------
    name : str
        One of abs, sqrt, exp, log, cos, sin.
    a : pair of reals
        The argument.

    Raises
    ------
    ValueError
        For the root or the logarithm of anything but a real number that is large enough.
    OverflowError
        When the value is no finite number.
    """
    if name == "abs":
        if a[1] == 0:
            return (a[0] if a[0] >= 0 else -a[0]), 0
        size: float = abs(to_complex(a))
        return size, 0
    if name in ("sqrt", "log"):
        if a[1] != 0 or a[0] < 0 or (name == "log" and a[0] == 0):
            raise ValueError(f"{name} of {complex_text(a)}, which is not a positive number")
        value: Real = _root(a[0]) if name == "sqrt" else math.log(a[0])
        return value, 0
    if a == ZERO:
        return ONE if name in ("exp", "cos") else ZERO
    argument = to_complex(a)
    noise = EPS * abs(
        argument
    )  # an argument in error by one unit moves the value by this: less cannot be told from 0
    if name == "exp":
        # real part as one factor, so that exp(i t) and exp(-i t) are conjugate to the last bit
        growth = math.exp(argument.real)
        if argument.imag == 0:
            return growth, 0
        turn = from_complex(complex(math.cos(argument.imag), math.sin(argument.imag)), noise)
        return times((growth, 0), turn)
    if argument.imag == 0:
        return from_complex(math.cos(argument.real) if name == "cos" else math.sin(argument.real), noise)
    return from_complex(cmath.cos(argument) if name == "cos" else cmath.sin(argument))


def _root(value: Real) -> Real:
    if isinstance(value, float):
        return math.sqrt(value)
    exact = Fraction(value)
    above, below = math.isqrt(exact.numerator), math.isqrt(exact.denominator)
    if above * above == exact.numerator and below * below == exact.denominator:
        return Fraction(above, below)
    return math.sqrt(value)


def real_text(value: Real) -> str:
    """Shortest text that a formula reads back as the same number; negative numbers keep their sign."""
    if isinstance(value, int) or (isinstance(value, Fraction) and value.denominator == 1):
        text = str(int(value))
        return text if len(text) < 16 else _float_text(float(value))
    text = _float_text(float(value))
    if isinstance(value, float) or Fraction(text) == value:
        return text
    ratio = f"{value.numerator}/{value.denominator}"
    return ratio if len(ratio) < 24 else text


def _float_text(value: float) -> str:
    return repr(value).removesuffix(".0")


def complex_text(value: Complex) -> str:
    """Text of a complex number; one with both parts is put in brackets."""
    real, imag = value
    if imag == 0:
        return real_text(real)
    imag_text = real_text(imag)
    imag_text = f"{imag_text}*1j" if "/" in imag_text else f"{imag_text}j"
    if real == 0:
        return imag_text
    joined = f" - {imag_text[1:]}" if imag_text.startswith("-") else f" + {imag_text}"
    return f"({real_text(real)}{joined})"
