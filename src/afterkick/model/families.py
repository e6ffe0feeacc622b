"""The classical analog filter families, exact or in balls at the working precision.

A family is a low-pass prototype in x = s / (2*pi*corner), and each filter is that prototype after a change of variable:
low-pass x = f, high-pass 1/f, band-pass (f^2 + c^2) / (b f) with c^2 = low * high and b = high - low, band-stop the
reciprocal of that (any filter handbook).  Roots that are algebraic with a known polynomial are keyed by it, so that a
Butterworth filter and the lag it contains share their pole; the others are keyed by the parameters of the family.

The corner x = j is, by common practice:

- Butterworth and Bessel: half the power, exactly;
- Chebyshev and elliptic: the end of the pass band, where the attenuation passes ``ripple_db`` for the last time;
- inverse Chebyshev: the edge of the stop band, where the attenuation reaches ``stop_db`` for the first time.

The gain at x = 0 is 1, except that the ripple of an even-order Chebyshev or elliptic filter starts at its lower edge,
``-ripple_db``: the peak of the ripple is 1 always.
"""

from collections.abc import Callable, Hashable, Sequence
from functools import lru_cache
from math import factorial

from attrs import frozen
from flint import acb, arb, ctx, fmpq, fmpq_poly, fmpz_poly

from afterkick.errors import Problem, Refused
from afterkick.model.factors import Factors, Gain
from afterkick.model.roots import HERTZ, ZERO, Root, algebraic_roots, merged
from afterkick.numbers import certified, decided_sign, mid_float

__all__ = ["Prototype", "attenuation", "bandpass", "bandstop", "highpass", "lowpass", "prototype"]


@frozen
class _Point:
    """A real pole or zero of a prototype, or a conjugate pair named by its member with the positive imaginary part."""

    evaluate: Callable[[], acb]
    real: bool
    name: tuple[Hashable, ...]
    annihilator: tuple[fmpq, ...] = ()
    """A rational polynomial it is a root of, lowest power first; x^2 - c for a real point.  Empty: none is known."""

    def reciprocal(self) -> "_Point":
        """1/x; the conjugate of it for a pair."""

        def evaluate() -> acb:
            value = self.evaluate()
            return value / (value.real**2 + value.imag**2)

        return _Point(evaluate, self.real, self.name, self.annihilator[::-1])


@frozen
class Prototype:
    """A low-pass filter with its corner at x = j: leading * prod(x - zero) / prod(x - pole)."""

    zeros: tuple[_Point, ...]
    poles: tuple[_Point, ...]
    leading: Gain
    at_zero: Gain
    """The gain at x = 0."""

    @property
    def excess(self) -> int:
        """The number of zeros at infinity."""
        return _degree(self.poles) - _degree(self.zeros)


def _degree(points: Sequence[_Point]) -> int:
    return sum(1 if point.real else 2 for point in points)


def _exact(gain: Gain) -> fmpq | None:
    return gain.rational if gain.pi_power == 0 and not gain.others else None


def attenuation(decibels: fmpq) -> Gain:
    """10^(-decibels/20): a rational for whole multiples of 20 dB, and irrational for every other rational number."""
    exponent = decibels / 20
    if exponent.denominator == 1:
        return Gain(fmpq(10) ** -int(exponent.numerator))
    return Gain(others=(lambda: (-arb.const_log10() * arb(exponent)).exp(),))


def _power_excess(decibels: fmpq) -> arb:
    """10^(decibels/10) - 1."""
    return (arb.const_log10() * arb(decibels) / 10).expm1()


# Prototypes


def prototype(family: str, order: int, ripple_db: fmpq | None = None, stop_db: fmpq | None = None) -> Prototype:
    """The low-pass prototype of a family; what the family has no use for is ignored.

    ``chebyshev`` and ``elliptic`` need ``ripple_db`` > 0, ``inverse-chebyshev`` and ``elliptic`` ``stop_db`` > 0; of an
    elliptic filter ``stop_db`` > ``ripple_db``.

    :raises Refused: where one of them is missing.
    """
    if family == "butterworth" or (family == "bessel" and order == 1):
        return _butterworth(order)
    if family == "bessel":
        return _bessel(order)
    if family == "inverse-chebyshev":
        stop = _needed("stop_db", stop_db)
        # At order 1 all three are the lag with that attenuation at the corner.
        return _chebyshev(1, stop) if order == 1 else _inverse_chebyshev(order, stop)
    ripple = _needed("ripple_db", ripple_db)
    if family == "chebyshev" or order == 1:
        return _chebyshev(order, ripple)
    return _elliptic(order, ripple, _needed("stop_db", stop_db))


def _needed(key: str, decibels: fmpq | None) -> fmpq:
    if decibels is None:
        raise Refused(Problem(key, "missing", "a number of decibels above 0", f"add {key} = ..."))
    return decibels


def _on_ellipse(
    order: int, half_axes: Callable[[], tuple[arb, arb]], name: tuple[Hashable, ...], annihilator: tuple[fmpq, ...] = ()
) -> tuple[_Point, ...]:
    """-a sin(t) + j b cos(t) at the angles t = (2 i - 1) pi / (2 order)."""

    def point(index: int) -> _Point:
        turn = fmpq(2 * index - 1, 2 * order)
        real = turn == fmpq(1, 2)

        def evaluate() -> acb:
            a, b = half_axes()
            sine, cosine = arb.sin_cos_pi_fmpq(turn)
            return acb(-a) if real else acb(-a * sine, b * cosine)

        return _Point(evaluate, real, (*name, index), annihilator)

    return tuple(point(index) for index in range(1, (order + 1) // 2 + 1))


def _butterworth(order: int) -> Prototype:
    """Poles on the unit circle: the left half of the roots of 1 + (-1)^n x^(2n) (Butterworth 1930)."""
    circle = (fmpq((-1) ** order), *[fmpq(0)] * (2 * order - 1), fmpq(1))
    poles = _on_ellipse(order, lambda: (arb(1), arb(1)), ("butterworth", order), circle)
    square = (fmpq(-1), fmpq(0), fmpq(1))
    poles = tuple(_Point(pole.evaluate, True, pole.name, square) if pole.real else pole for pole in poles)
    return Prototype((), poles, Gain(), Gain())


def _normalized(zeros: tuple[_Point, ...], poles: tuple[_Point, ...], at_zero: Gain, at_infinity: Gain) -> Prototype:
    """The prototype with a given gain at x = 0; ``at_infinity`` is its gain there, unless it has zeros at infinity."""
    if _degree(zeros) == _degree(poles):
        return Prototype(zeros, poles, at_infinity, at_zero)

    def spread() -> arb:
        total = arb(1)
        for points, power in ((poles, 1), (zeros, -1)):
            for point in points:
                value = point.evaluate()
                total *= (-value.real if point.real else value.real**2 + value.imag**2) ** power
        return total

    return Prototype(zeros, poles, at_zero * Gain(others=(spread,)), at_zero)


def _chebyshev(order: int, ripple_db: fmpq) -> Prototype:
    """1 / (1 + e^2 T_n(w)^2), e^2 = 10^(ripple_db/10) - 1: poles on an ellipse (Weinberg 1962)."""

    def half_axes() -> tuple[arb, arb]:
        small = (1 / _power_excess(ripple_db).sqrt()).asinh() / order
        return small.sinh_cosh()

    square: tuple[fmpq, ...] = ()
    if order == 1 and (ripple_db / 10).denominator == 1:
        square = (fmpq(-1), fmpq(0), fmpq(10) ** int((ripple_db / 10).numerator) - 1)
    poles = _on_ellipse(order, half_axes, ("chebyshev", order, ripple_db), square)
    return _normalized((), poles, Gain() if order % 2 else attenuation(ripple_db), Gain())


def _inverse_chebyshev(order: int, stop_db: fmpq) -> Prototype:
    """1 less the power of a Chebyshev filter at 1/w: the reciprocals of its poles, and zeros where T_n(1/w) is zero."""

    def half_axes() -> tuple[arb, arb]:
        small = _power_excess(stop_db).sqrt().asinh() / order
        return small.sinh_cosh()

    name: tuple[Hashable, ...] = ("inverse-chebyshev", order, stop_db)
    poles = tuple(point.reciprocal() for point in _on_ellipse(order, half_axes, name))
    chebyshev = fmpz_poly.chebyshev_t(order)
    # T_n has powers of one parity; x^n T_n(j/x) is, but for a power of j, the polynomial with these coefficients.
    annihilator = [fmpq(0)] * (order + 1)
    annihilator[::2] = [fmpq((-1) ** i * int(chebyshev[order - 2 * i])) for i in range(order // 2 + 1)]

    def zero(index: int) -> _Point:
        turn = fmpq(2 * index - 1, 2 * order)
        return _Point(lambda: acb(0, 1 / arb.cos_pi_fmpq(turn)), False, ("zero", *name, index), tuple(annihilator))

    zeros = tuple(zero(index) for index in range(1, order // 2 + 1))
    return _normalized(zeros, poles, Gain(), attenuation(stop_db))


@lru_cache(maxsize=64)
def _bessel_poles(order: int, bits: int) -> tuple[acb, ...]:
    """The poles with imaginary part >= 0, that part falling; ``bits`` is the present working precision."""
    theta = [
        factorial(2 * order - k) // (2 ** (order - k) * factorial(k) * factorial(order - k)) for k in range(order + 1)
    ]
    # |theta(jw)|^2 rises with y = w^2: it is even(-y)^2 + y odd(-y)^2, and half the power is where it is 2 theta(0)^2.
    even, odd = (fmpz_poly([(-1) ** i * c for i, c in enumerate(theta[first::2])]) for first in (0, 1))
    half_power = even * even + fmpz_poly([0, 1]) * odd * odd - 2 * theta[0] ** 2
    (corner,) = (root.real.sqrt() for root in _complex_roots(half_power) if root.imag.is_zero() and root.real > 0)
    upper = [root / corner for root in _complex_roots(fmpz_poly(theta)) if root.imag.is_zero() or root.imag > 0]
    return tuple(sorted(upper, key=lambda root: -mid_float(root.imag)))


def _complex_roots(polynomial: fmpz_poly) -> list[acb]:
    """Disjoint balls round the roots of a square-free polynomial; real ones have an imaginary part of exactly zero."""
    # python-flint's stub forgets the multiplicity that comes with each root.
    return [root for root, _ in polynomial.complex_roots()]  # type: ignore[misc, has-type]


def _bessel(order: int) -> Prototype:
    """Poles at the zeros of the reverse Bessel polynomial, whose coefficients are integers (Storch 1954)."""

    def pole(index: int) -> _Point:
        real = order % 2 == 1 and index == (order - 1) // 2
        return _Point(lambda: _bessel_poles(order, ctx.prec)[index], real, ("bessel", order, index))

    return _normalized((), tuple(pole(index) for index in range((order + 1) // 2)), Gain(), Gain())


@lru_cache(maxsize=64)
def _elliptic_points(order: int, ripple_db: fmpq, stop_db: fmpq, bits: int) -> tuple[tuple[acb, ...], tuple[acb, ...]]:
    """Zeros and poles with imaginary part >= 0; ``bits`` is the present working precision.

    The degree equation says that the order divides the ratio of periods, which needs no nome and no modulus; cd is
    a quotient of theta functions of that ratio (Abramowitz and Stegun, chapters 16 and 17; R_F is Carlson's).
    """
    ripple, stop = _power_excess(ripple_db), _power_excess(stop_db)
    modulus = ripple / stop  # squared, of the characteristic function
    complement = (ripple + 1) * _power_excess(stop_db - ripple_db) / stop  # 1 - modulus
    mean, mean_complement = arb(1).agm(modulus.sqrt()), arb(1).agm(complement.sqrt())
    ratio = acb(0, mean_complement / (mean * order))
    depth = acb.elliptic_rf(ripple, ripple + modulus, 1 + ripple).real * 2 * mean_complement / (arb.pi() * order)
    _, theta_2, theta_3, _ = acb.modular_theta(acb(0), ratio)
    factor = theta_3.real / theta_2.real

    def quotient(turn: fmpq, height: arb) -> acb:
        _, upper, lower, _ = acb.modular_theta(acb(arb(turn) / 2, -height / 2), ratio)
        return upper / lower

    turns = [fmpq(2 * index - 1, order) for index in range(1, order // 2 + 1)]
    zeros = tuple(acb(0, factor / quotient(turn, arb(0)).real) for turn in turns)
    poles = tuple(acb(0, factor) * quotient(turn, depth) for turn in turns)
    if order % 2:
        poles = (*poles, acb((acb(0, factor) * quotient(fmpq(1), depth)).real))
    return zeros, poles


def _elliptic(order: int, ripple_db: fmpq, stop_db: fmpq) -> Prototype:
    """1 / (1 + e^2 R_n(w)^2) with the elliptic rational function R_n (Cauer), e^2 = 10^(ripple_db/10) - 1."""
    name: tuple[Hashable, ...] = ("elliptic", order, ripple_db, stop_db)

    def zero(index: int) -> _Point:
        return _Point(
            lambda: _elliptic_points(order, ripple_db, stop_db, ctx.prec)[0][index], False, ("zero", *name, index)
        )

    def pole(index: int) -> _Point:
        real = order % 2 == 1 and index == order // 2
        return _Point(lambda: _elliptic_points(order, ripple_db, stop_db, ctx.prec)[1][index], real, (*name, index))

    zeros = tuple(zero(index) for index in range(order // 2))
    poles = tuple(pole(index) for index in range((order + 1) // 2))
    return _normalized(zeros, poles, Gain() if order % 2 else attenuation(ripple_db), attenuation(stop_db))


# Prototype to filter


def lowpass(shape: Prototype, corner_hz: fmpq) -> Factors:
    """The prototype with its corner at ``corner_hz``."""
    return Factors(
        _moved(shape.zeros, corner_hz, "lowpass"),
        _moved(shape.poles, corner_hz, "lowpass"),
        shape.leading * Gain(corner_hz**shape.excess, shape.excess),
        _exact(shape.at_zero),
    )


def highpass(shape: Prototype, corner_hz: fmpq) -> Factors:
    """The prototype mirrored about ``corner_hz``: its zeros at infinity come to the origin."""
    return Factors(
        merged([_moved(_reciprocals(shape.zeros), corner_hz, "highpass"), _at_origin(shape.excess)]),
        _moved(_reciprocals(shape.poles), corner_hz, "highpass"),
        shape.at_zero,
        None if shape.excess else _exact(shape.leading),
    )


def bandpass(shape: Prototype, low_hz: fmpq, high_hz: fmpq) -> Factors:
    """The band from ``low_hz`` to ``high_hz``, the images of the corner; twice as many poles as the prototype."""
    return Factors(
        merged([_split(shape.zeros, low_hz, high_hz, "bandpass"), _at_origin(shape.excess)]),
        _split(shape.poles, low_hz, high_hz, "bandpass"),
        shape.leading * Gain((high_hz - low_hz) ** shape.excess, shape.excess),
        None if shape.excess else _exact(shape.leading),
    )


def bandstop(shape: Prototype, low_hz: fmpq, high_hz: fmpq) -> Factors:
    """What is left without the band from ``low_hz`` to ``high_hz``, the images of the corner; twice as many poles."""
    center = fmpq_poly([low_hz * high_hz, 0, 1]) ** shape.excess
    return Factors(
        merged([_split(_reciprocals(shape.zeros), low_hz, high_hz, "bandstop"), algebraic_roots(center, HERTZ)]),
        _split(_reciprocals(shape.poles), low_hz, high_hz, "bandstop"),
        shape.at_zero,
        _exact(shape.at_zero),
    )


def _reciprocals(points: Sequence[_Point]) -> list[_Point]:
    return [point.reciprocal() for point in points]


def _at_origin(times: int) -> dict[Root, int]:
    return {ZERO: times} if times else {}


def _moved(points: Sequence[_Point], corner_hz: fmpq, kind: str) -> dict[Root, int]:
    """The points times ``corner_hz``."""

    def root(point: _Point) -> Root:
        degree = len(point.annihilator) - 1
        annihilator = fmpq_poly([c * corner_hz ** (degree - k) for k, c in enumerate(point.annihilator)])
        key = (kind, corner_hz, *point.name)
        return _root(lambda: point.evaluate() * arb(corner_hz), point.real, key, annihilator)

    return {root(point): 1 for point in points}


def _split(points: Sequence[_Point], low_hz: fmpq, high_hz: fmpq, kind: str) -> dict[Root, int]:
    """For each point p the roots of x^2 - p (high - low) x + low * high."""
    found: dict[Root, int] = {}
    for point in points:
        annihilator = _banded(point.annihilator, low_hz, high_hz)
        key = (kind, low_hz, high_hz, *point.name)
        sign = _discriminant_sign(point, low_hz, high_hz) if point.real else -1
        inner = _inner(point, low_hz, high_hz, sign)
        if sign == 0 or (point.real and sign < 0):
            found[_root(inner, sign == 0, key, annihilator)] = 2 if sign == 0 else 1
            continue
        outer = _outer(inner, low_hz * high_hz)
        for index, evaluate in enumerate((inner, outer)):
            found[_root(evaluate, point.real, (*key, index), annihilator)] = 1
    return found


def _banded(annihilator: Sequence[fmpq], low_hz: fmpq, high_hz: fmpq) -> fmpq_poly:
    """A polynomial for the roots of x^2 - p (high - low) x + low * high, from one for p."""
    square, width = fmpq_poly([low_hz * high_hz, 0, 1]), fmpq_poly([0, high_hz - low_hz])
    total, power = fmpq_poly([]), fmpq_poly([1])
    for k, c in enumerate(annihilator):
        total += c * power * width ** (len(annihilator) - 1 - k)
        power *= square
    return total


def _discriminant_sign(point: _Point, low_hz: fmpq, high_hz: fmpq) -> int:
    """The sign of (p (high - low))^2 - 4 low * high for a real p, decided in rationals where p^2 is one."""
    width, product = (high_hz - low_hz) ** 2, 4 * low_hz * high_hz
    if point.annihilator:
        exact = -point.annihilator[0] / point.annihilator[2] * width - product
        return (exact > 0) - (exact < 0)
    return decided_sign(
        lambda: point.evaluate().real ** 2 * arb(width) - arb(product), "the discriminant of a band filter's real pole"
    )


def _inner(point: _Point, low_hz: fmpq, high_hz: fmpq, sign: int) -> Callable[[], acb]:
    """One root of x^2 - p (high - low) x + low * high, by sums without cancellation for Re p <= 0 <= Im p."""

    def evaluate() -> acb:
        middle = point.evaluate() * (arb(high_hz - low_hz) / 2)
        rest = arb(low_hz * high_hz) - middle * middle
        if sign == 0:
            return middle
        if point.real:
            root = abs(rest.real).sqrt()
            return acb(middle.real - root) if sign > 0 else acb(middle.real, root)
        return middle + acb(0, 1) * rest.sqrt()

    return evaluate


def _outer(inner: Callable[[], acb], product: fmpq) -> Callable[[], acb]:
    """The other root; for a pair its conjugate, which lies in the upper half plane with the first."""

    def evaluate() -> acb:
        value = inner()
        return value * arb(product) / (value.real**2 + value.imag**2)

    return evaluate


def _root(evaluate: Callable[[], acb], real: bool, key: tuple[Hashable, ...], annihilator: fmpq_poly) -> Root:
    """The root that ``evaluate`` gives in Hz, keyed by its irreducible polynomial where ``annihilator`` is not zero."""

    def radians() -> acb:
        return evaluate() * (2 * arb.pi())

    if annihilator.is_zero():
        return Root(("family", *key), real, radians)
    candidates = _candidates(tuple(annihilator.coeffs()))

    def near() -> list[Root]:
        value = radians()
        return [root for root in candidates if root.evaluate().overlaps(value)]

    known = certified(near, lambda found: len(found) == 1, "a root of a known polynomial")[0]
    return Root(known.key, real, radians)


@lru_cache(maxsize=8)
def _candidates(coefficients: tuple[fmpq, ...]) -> tuple[Root, ...]:
    """All roots of a rational polynomial in Hz; the roots of one filter ask for the same one again and again."""
    return tuple(algebraic_roots(fmpq_poly(list(coefficients)), HERTZ))
