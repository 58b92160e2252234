"""Terms of the Dunham expansion: names, sets, and the conventions that the whole program keeps.

Energy levels (J. L. Dunham, Phys. Rev. 41, 721 (1932)):

    E(v, J) = sum_kl Y_kl (v + 1/2)^k [J(J + 1)]^l            in cm-1

A line is E(upper) - E(lower), so Y_00 drops out and is never a term. For isotopologue a
against the reference isotopologue 0, with rho = sqrt(mu_0 / mu_a):

    Y_kl(a) = rho^(k + 2l) [ Y_kl + sum_A d_kl^A (M_A(0) / M_A(a) - 1) ]

which is linear in the reference's own Y_kl and in the breakdown terms d_kl^A (cm-1), the
departure from pure mass scaling that atom A causes (the form follows J. K. G. Watson,
J. Mol. Spectrosc. 80, 411 (1980); from memory).
"""

from __future__ import annotations

import re
from dataclasses import dataclass

from dunhamfit.errors import UsageError

_NAME = re.compile(r"Y?(?:(\d)(\d)|(\d+),(\d+))")


@dataclass(frozen=True, order=True)
class Term:
    """One coefficient Y_kl, in cm-1."""

    k: int
    l: int

    @property
    def name(self) -> str:
        """`Y10`; with an index of 10 or more, `Y10,0`."""
        return f"Y{indices(self.k, self.l)}"

    @property
    def mass_power(self) -> int:
        """Power of rho in the mass scaling, k + 2l."""
        return self.k + 2 * self.l


@dataclass(frozen=True, order=True)
class BreakdownTerm:
    """The departure d_kl^A of one term from mass scaling that atom A (an element symbol) causes, in cm-1."""

    atom: str
    k: int
    l: int

    @property
    def name(self) -> str:
        return f"d{indices(self.k, self.l)}_{self.atom}"

    @property
    def mass_power(self) -> int:
        return self.k + 2 * self.l


def indices(k: int, l: int) -> str:
    """`10` for (1, 0); `10,0` for (10, 0)."""
    return f"{k}{l}" if k < 10 and l < 10 else f"{k},{l}"


def parse_indices(text: str) -> tuple[int, int]:
    """(k, l) from `10`, `Y10` or `Y10,0`.

    Raises
    ------
    UsageError
        If the text is none of these, or is Y00.
    """
    found = _NAME.fullmatch(text.strip())
    if not found:
        raise UsageError(
            f"'{text}' is not a term; write Y and the two indices, such as Y21, or Y10,0 from index 10 on"
        )
    k, l = (int(part) for part in found.groups() if part is not None)
    if (k, l) == (0, 0):
        raise UsageError(
            "Y00 cannot be determined from transitions, since it drops out of every difference; remove it"
        )
    return k, l


class TermSet(tuple):
    """Terms of a model in the order l, k: Y10, Y20, ..., Y01, Y11, ..., Y02, ..."""

    __slots__ = ()

    def __new__(cls, terms):
        chosen = sorted({Term(*item) if not isinstance(item, Term) else item for item in terms}, key=_order)
        if not chosen:
            raise UsageError("a model needs at least one term")
        for term in chosen:
            if term.k < 0 or term.l < 0 or (term.k, term.l) == (0, 0):
                raise UsageError(f"({term.k}, {term.l}) is not a term: k and l are 0 or more, and not both 0")
        return super().__new__(cls, chosen)

    @classmethod
    def from_orders(cls, orders) -> TermSet:
        """Every term up to the highest k for each l.

        Parameters
        ----------
        orders : sequence of int
            Highest k for l = 0, 1, 2, ...; -1 for no term of that l.
        """
        orders = list(orders)
        if not orders or any(not isinstance(k, int) or isinstance(k, bool) or k < -1 for k in orders):
            raise UsageError(
                f"orders must be whole numbers, the highest k for l = 0, 1, 2, ... (got {orders})"
            )
        return cls(Term(k, l) for l, top in enumerate(orders) for k in range(top + 1) if (k, l) != (0, 0))

    @classmethod
    def from_names(cls, names) -> TermSet:
        """Terms by name, such as ["Y10", "Y20", "Y01"]."""
        return cls(Term(*parse_indices(name)) for name in names)

    @property
    def orders(self) -> tuple[int, ...]:
        """Highest k for each l, -1 where there is none."""
        return tuple(
            max((t.k for t in self if t.l == l), default=-1) for l in range(max(t.l for t in self) + 1)
        )

    @property
    def names(self) -> tuple[str, ...]:
        return tuple(term.name for term in self)


def _order(term: Term) -> tuple[int, int]:
    return term.l, term.k
