r"""Dunham's relations between the coefficients Y_kl and the potential, derived in exact rational numbers.

Potential (J. L. Dunham, Phys. Rev. 41, 721 (1932), doi:10.1103/PhysRev.41.721), with xi = (r - r_e)/r_e:

    V = a0 xi^2 (1 + a1 xi + a2 xi^2 + ...),    a0 = omega_e^2 / (4 B_e)

With eta = 2 B_e/omega_e, rho = (1 + xi) and the scaled energy e = E eta/omega_e the radial equation is

    eta^2 psi'' = Q psi,    Q = xi^2 A - 2e + x/rho^2,    A = 1 + a1 xi + ...,    x = eta^2 J(J + 1)

and each coefficient is a sum over correction orders c of polynomials with rational coefficients:

    Y_kl = omega_e sum_c eta^(k + 2l - 1 + 2c) P_klc(a1, a2, ...)

c = 0 is the classical part (absent for Y_00), every later one is smaller by eta^2.

Derivation. The exact quantisation condition: the contour integral of y = eta psi'/psi counts the nodes of
psi, where y^2 + eta y' = Q. Expansion in eta (the WKB series) gives

    G(e, x) = sum_c eta^2c Res s_2c = eta (v + 1/2),

in which s_2c is a sum of products of derivatives of Q with a half-odd power of Q; terms that are total
derivatives drop out, and each residue about the well is finite after expansion in 2e and x (Dunham's
method; the elimination of Q' by parts is common practice). The series G = e + H is inverted by Lagrange's
formula, which with negative powers allowed holds for k = 0 as well:

    [(eta (v + 1/2))^k] e = sum_n (-1)^n (k + n - 1)! / (k! n!) [e^(k + n - 1)] H^n
"""



from __future__ import annotations

from collections.abc import Mapping
from dataclasses import dataclass
from fractions import Fraction
from functools import lru_cache
from math import comb, factorial, lcm
from types import MappingProxyType

from dunhamfit.errors import UsageError

# A polynomial in a1, a2, ... is a dict from a code to a coefficient; the exponent of a_n is bits
# 8(n-1) to 8n-1 of the code, so that codes add where monomials multiply.
_BITS = 8
_Polynomial = dict[int, Fraction]


@dataclass(frozen=True, eq=False)
class Relation:
    """Y_kl as polynomials in the potential coefficients.

    Attributes
    ----------
    k, l : int
    polynomials : tuple of mappings, one for each correction order c
        From the indices of a monomial to its coefficient: (1, 1, 3) is a1^2 a3, () is 1.
        Y_kl = omega_e sum_c eta^(k + 2l - 1 + 2c) polynomials[c], eta = 2 B_e/omega_e.
    """

    k: int
    l: int
    polynomials: tuple[Mapping[tuple[int, ...], Fraction], ...]


def dunham_relations(terms, *, orders: int = 2, count: int | None = None) -> tuple[Relation, ...]:
    """Relations for the coefficients `terms`, in their order; derived at the first call and kept.

    Parameters
    ----------
    terms : sequence of (k, l) pairs, or of records with fields `k` and `l`
        (0, 0) is allowed.
    orders : int
        Number of orders: 1 is the classical part alone, 2 adds the first correction, and so on.
    count : int, optional
        The potential ends with a_count; by default every coefficient that enters is kept.

    Raises
    ------
    UsageError
    """
    pairs = term_pairs(terms)
    if orders < 1:
        raise UsageError(f"'orders' must be 1 or more (got {orders})")
    if count is not None and count < 0:
        raise UsageError(f"'count' must be 0 or more (got {count})")
    return _derived(pairs, orders, count)


def term_pairs(terms) -> tuple[tuple[int, int], ...]:
    """`terms` as pairs of whole numbers; raise UsageError if one is negative or there is none."""
    pairs = tuple((int(t.k), int(t.l)) if hasattr(t, "k") else (int(t[0]), int(t[1])) for t in terms)
    if not pairs or min(map(min, pairs)) < 0:
        raise UsageError(f"terms must be pairs (k, l) of whole numbers from 0 (got {pairs})")
    return pairs


@lru_cache(maxsize=16)
def _derived(terms: tuple[tuple[int, int], ...], orders: int, count: int | None) -> tuple[Relation, ...]:
    top = tuple(max((k for k, m in terms if m == l), default=-1) for l in range(max(m for _, m in terms) + 1))
    found = _invert(_action(top, orders, count), top, orders)
    return tuple(
        Relation(k, l, tuple(_named(found.get((k, l, c), {})) for c in range(orders)))
        for k, l in terms
    )


def _named(polynomial: _Polynomial) -> Mapping[tuple[int, ...], Fraction]:
    mask = (1 << _BITS) - 1
    named = {}
    for code, value in polynomial.items():
        if value:
            powers = [(code >> (_BITS * n)) & mask for n in range(-(-code.bit_length() // _BITS))]
            named[tuple(n + 1 for n, power in enumerate(powers) for _ in range(power))] = value
    return MappingProxyType(dict(sorted(named.items(), key=lambda item: (sum(item[0]), item[0]))))


def _highest_excess(top: tuple[int, ...], orders: int, x_power: int, order: int) -> int:
    """Most e-powers above one for each factor that H^n may hold and still reach a wanted term.

    Later factors lower the count by one at the most, and only with a power of x or of eta^2.
    """
    later = orders - 1 - order
    return max(k - 1 + l - x_power for l, k in enumerate(top) if l >= x_power) + later


# --- the action G -----------------------------------------------------------------------------------


def _action(top: tuple[int, ...], orders: int, count: int | None) -> dict[tuple[int, int, int], _Polynomial]:
    """Polynomials of G by (power of e, power of x, order c)."""
    action: dict[tuple[int, int, int], _Polynomial] = {}
    for order in range(orders):
        for (derivatives, half_power), factor in _wkb_integrand(2 * order).items():
            for x_power in range(len(top)):
                for e_power in range(_highest_excess(top, orders, x_power, order) + 2):
                    into = action.setdefault((e_power, x_power, order), {})
                    _add_residue(into, derivatives, half_power, factor, e_power, x_power, count)
    return {key: polynomial for key, polynomial in action.items() if any(polynomial.values())}


def _add_residue(into, derivatives, half_power, factor, e_power, x_power, count) -> None:
    """Add the residue of factor * prod Q^(m) * Q^(-half_power/2) at the given powers of e and x to `into`."""
    longest = half_power + 2 * (e_power + x_power) - 1
    for x_used, rho_power, shift, numerator in _derivative_product(derivatives, longest, count):
        rest = x_power - x_used
        power = Fraction(-half_power, 2) - e_power - rest  # of xi^2 A
        wanted = half_power + 2 * (e_power + rest) - 1 - shift
        if rest < 0 or wanted < 0:
            continue
        outer = factor * _binomial(power + e_power + rest, e_power + rest) * comb(e_power + rest, rest)
        outer *= (-2) ** e_power
        for weight in range(wanted + 1):
            scale = outer * _binomial(-2 * rest - rho_power, wanted - weight)
            _add_product(into, numerator, _power_of_a(power, weight, count), scale)


@lru_cache(maxsize=64)
def _derivative_product(derivatives: tuple[int, ...], longest: int, count: int | None):
    """The product of Q^(m) as a list of x^used rho^-rho_power xi^shift polynomial."""
    product = [(0, 0, 0, {0: Fraction(1)})]
    for m in derivatives:
        grown = []
        for used, rho_power, shift, polynomial in product:
            for n in range(max(m - 2, 0), longest - shift + m - 1):
                if n and count is not None and n > count:
                    break
                code = 1 << (_BITS * (n - 1)) if n else 0
                fall = factorial(n + 2) // factorial(n + 2 - m)
                scaled = {key + code: value * fall for key, value in polynomial.items()}
                grown.append((used, rho_power, shift + n + 2 - m, scaled))
            fall = (-1) ** m * factorial(m + 1)
            scaled = {key: value * fall for key, value in polynomial.items()}
            grown.append((used + 1, rho_power + 2 + m, shift, scaled))
        product = grown
    return product


@lru_cache(maxsize=8)
def _wkb_integrand(order: int) -> dict[tuple[tuple[int, ...], int], Fraction]:
    """s_order by (derivatives m of Q, p) for prod Q^(m) Q^(-p/2), without total derivatives; order even."""
    series = [{((), -1): Fraction(-1)}]
    for j in range(1, order + 1):
        # y^2 + eta y' = Q at order eta^j: s_j = (s_1 s_(j-1) + ... + s_(j-1) s_1 + s'_(j-1)) / (2 sqrt Q)
        total = _derivative(series[j - 1])
        for i in range(1, j):
            for (first, p), value in series[i].items():
                for (second, q), other in series[j - i].items():
                    _accumulate(total, (tuple(sorted(first + second)), p + q), value * other)
        series.append({(derivatives, p + 1): value / 2 for (derivatives, p), value in total.items()})
    return _by_parts(series[order])


def _derivative(expression):
    result = {}
    for (derivatives, p), value in expression.items():
        _accumulate(result, (tuple(sorted((*derivatives, 1))), p + 2), value * Fraction(-p, 2))
        for place, m in enumerate(derivatives):
            raised = (*derivatives[:place], m + 1, *derivatives[place + 1 :])
            _accumulate(result, (tuple(sorted(raised)), p), value)
    return result


def _by_parts(expression):
    """Remove every factor Q': F Q' Q^(-p/2) is -F' Q^(1 - p/2)/(1 - p/2) plus a total derivative."""
    waiting, done = dict(expression), {}
    while waiting:
        (derivatives, p), value = waiting.popitem()
        if 1 not in derivatives:
            _accumulate(done, (derivatives, p), value)
            continue
        rest = derivatives[1:]  # sorted: the first is a 1
        scale = -value / (1 - Fraction(p, 2))
        for place, m in enumerate(rest):
            raised = tuple(sorted((*rest[:place], m + 1, *rest[place + 1 :])))
            _accumulate(waiting, (raised, p - 2), scale)
    return {key: value for key, value in done.items() if value}


# --- inversion --------------------------------------------------------------------------------------


def _invert(action, top: tuple[int, ...], orders: int) -> dict[tuple[int, int, int], _Polynomial]:
    """P_klc by (k, l, c) from G by (power of e, power of x, order), by Lagrange's formula."""
    rest = {key: polynomial for key, polynomial in action.items() if key != (1, 0, 0)}
    base = _integer_base(rest)
    whole = {
        (i - 1, l, c): {code: int(value * base ** _grade(i - 1, l, c)) for code, value in polynomial.items()}
        for (i, l, c), polynomial in rest.items()
    }
    found: dict[tuple[int, int, int], _Polynomial] = {(1, 0, 0): {0: Fraction(1)}}
    power, n = {(0, 0, 0): {0: 1}}, 0
    while power:
        n += 1
        grown: dict[tuple[int, int, int], dict[int, int]] = {}
        for (excess, l, c), left in power.items():
            for (more, m, d), right in whole.items():
                key = (excess + more, l + m, c + d)
                within = key[1] < len(top) and key[2] < orders
                if within and key[0] <= _highest_excess(top, orders, key[1], key[2]):
                    _add_product(grown.setdefault(key, {}), left, right, 1)
        power = grown
        for (excess, l, c), polynomial in power.items():
            k = excess + 1
            if 0 <= k <= top[l]:
                scale = Fraction((-1) ** n * factorial(k + n - 1), factorial(k) * factorial(n))
                scale /= base ** _grade(excess, l, c)
                for code, value in polynomial.items():
                    _accumulate(found.setdefault((k, l, c), {}), code, value * scale)
    return found


def _grade(excess: int, x_power: int, order: int) -> int:
    """Positive for every part of H and additive in products."""
    return excess + 2 * x_power + 4 * order


def _integer_base(parts) -> int:
    """A number whose power `grade` makes every coefficient of H whole, since whole numbers multiply fast."""
    twos, odd = 0, 1
    for (i, l, c), polynomial in parts.items():
        denominator = lcm(*(value.denominator for value in polynomial.values()))
        two = (denominator & -denominator).bit_length() - 1
        twos = max(twos, -(-two // _grade(i - 1, l, c)))
        odd = lcm(odd, denominator >> two)
    return odd << twos


# --- polynomials ------------------------------------------------------------------------------------


def _accumulate(into: dict, key, value) -> None:
    into[key] = into.get(key, 0) + value


def _add_product(into: dict, left: dict, right: dict, scale) -> None:
    if not scale:
        return
    if len(left) > len(right):
        left, right = right, left
    for first, value in left.items():
        value *= scale
        for second, other in right.items():
            code = first + second
            into[code] = into.get(code, 0) + value * other


@lru_cache(maxsize=4096)
def _power_of_a(power: Fraction, weight: int, count: int | None) -> _Polynomial:
    """Coefficient of xi^weight in (1 + a1 xi + a2 xi^2 + ...)^power."""
    result: _Polynomial = {}
    largest = weight if count is None else min(weight, count)
    for parts in _partitions(weight, largest):
        ways, code = factorial(len(parts)), 0
        for n in set(parts):
            repeats = parts.count(n)
            ways //= factorial(repeats)
            code += repeats << (_BITS * (n - 1))
        result[code] = _binomial(power, len(parts)) * ways
    return result


def _partitions(total: int, largest: int):
    if total == 0:
        yield ()
    for first in range(min(total, largest), 0, -1):
        for rest in _partitions(total - first, first):
            yield (first, *rest)


def _binomial(power, n: int) -> Fraction:
    """Binomial coefficient of any rational upper number."""
    value = Fraction(1)
    for i in range(n):
        value = value * (power - i) / (i + 1)
    return value
