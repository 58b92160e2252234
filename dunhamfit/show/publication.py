"""What a paper takes from a run: a table of constants by isotopologue, the methods in words, the references."""

from __future__ import annotations

from collections.abc import Mapping, Sequence

from dunhamfit.fit.record import Fit
from dunhamfit.show.numbers import format_number, format_value
from dunhamfit.show.policy import policy_words
from dunhamfit.show.tables import Column, Table

# Author, journal, volume, first page, year. All from memory but Wang2021; titles are left out for that reason.
_ARTICLES = {
    "Dunham1932": ("Dunham, J. L.", "Phys. Rev.", "41", "721", "1932"),
    "Bjorck1967": ('Bj{\\"o}rck, {\\AA}.', "BIT", "7", "257", "1967"),
    "Patterson1971": ("Patterson, H. D. and Thompson, R.", "Biometrika", "58", "545", "1971"),
    "Watson1980": ("Watson, J. K. G.", "J. Mol. Spectrosc.", "80", "411", "1980"),
    "Watson2003": ("Watson, J. K. G.", "J. Mol. Spectrosc.", "219", "326", "2003"),
    "ForemanMackey2013": (
        "Foreman-Mackey, D. and Hogg, D. W. and Lang, D. and Goodman, J.",
        "Publ. Astron. Soc. Pac.",
        "125",
        "306",
        "2013",
    ),
    "Wang2021": (
        "Wang, M. and Huang, W. J. and Kondev, F. G. and Audi, G. and Naimi, S.",
        "Chin. Phys. C",
        "45",
        "030003",
        "2021",
    ),
}
# Author, title, publisher, year.
_BOOKS = {
    "Huber1981": ("Huber, P. J.", "Robust Statistics", "Wiley", "1981"),
    "GUM2008": (
        "{Joint Committee for Guides in Metrology}",
        "Guide to the expression of uncertainty in measurement, JCGM 100:2008",
        "BIPM",
        "2008",
    ),
}


def isotopologue_table(fit: Fit, constants: Mapping[str, Sequence[tuple[str, float, float]]]) -> Table:
    """Constants of several isotopologues side by side, as value(sigma) in cm-1.

    Parameters
    ----------
    fit : Fit
    constants : mapping from isotopologue to (name, value, sigma) of its terms, in one order
    """
    names = [name for name, _, _ in next(iter(constants.values()))]
    counts = {
        name: int((fit.lines.used & (fit.lines.isotopologue == code)).sum())
        for code, name in enumerate(fit.lines.isotopologues)
    }
    rows = [
        (name, *(format_value(*constants[isotopologue][row][1:]) for isotopologue in constants))
        for row, name in enumerate(names)
    ]
    rows.append(("lines", *(str(counts.get(isotopologue, 0)) for isotopologue in constants)))
    columns = (Column("constant"), *(Column(name, "decimal", "cm-1") for name in constants))
    return Table("Constants by isotopologue", columns, tuple(rows), (policy_words(fit),))


def methods_paragraph(fit: Fit) -> str:
    """The fit in a paragraph for the methods section; every number in it is one of the run's."""
    stats, lines = fit.statistics, fit.lines
    isotopologues = sorted({lines.isotopologues[code] for code in fit.groups.isotopologue})
    bands = {(int(u), int(l)) for u, l in zip(fit.groups.v_upper, fit.groups.v_lower, strict=True)}
    text = [
        f"{stats.lines} lines of {len(bands)} bands of {', '.join(isotopologues)} from {len(lines.sources)} "
        f"{'source' if len(lines.sources) == 1 else 'sources'} were fitted at once, by weighted linear least squares, "
        f"to the Dunham expansion [Dunham1932] of {fit.model.reference.name} with {len(fit.model.terms)} terms",
    ]
    if fit.model.breakdown:
        text[0] += (
            f" and {len(fit.model.breakdown)} terms for the departure from pure mass scaling [Watson1980], with atomic "
            "masses of the 2020 evaluation [Wang2021]"
        )
    excluded = len(lines) - stats.lines
    if excluded:
        text.append(f"{excluded} lines that were read took no part; each is listed with the reason")
    text.append(policy_words(fit).rstrip("."))
    for name, factor, sigma in zip(fit.noise.names, fit.noise.factors, fit.noise.sigmas, strict=True):
        if sigma == sigma and len(fit.noise.names) <= 12:
            text.append(f"The noise factor of {name} is {format_value(float(factor), float(sigma))}")
    text.append(
        f"Against the stated uncertainties chi-square is {format_number(stats.chi2)} for {stats.dof} degrees of freedom"
    )
    return ". ".join(text) + ".\n"


def bibtex(fit: Fit, *, sampled: bool) -> str:
    """Entries of the methods that the run used."""
    keys = ["Dunham1932", "Bjorck1967", "GUM2008", "Wang2021"]
    if fit.model.breakdown:
        keys.append("Watson1980")
    if fit.noise.policy not in ("stated", "common"):
        keys.append("Patterson1971")
    if fit.robust != "none":
        keys.append("Huber1981")
    if fit.robust == "watson":
        keys.append("Watson2003")
    if sampled:
        keys.append("ForemanMackey2013")
    return "\n".join(_entry(key) for key in keys)


def _entry(key: str) -> str:
    if key in _ARTICLES:
        kind, names, values = "article", ("author", "journal", "volume", "pages", "year"), _ARTICLES[key]
    else:
        kind, names, values = "book", ("author", "title", "publisher", "year"), _BOOKS[key]
    body = "".join(f"  {name} = {{{value}}},\n" for name, value in zip(names, values, strict=True))
    return f"@{kind}{{{key},\n{body}}}\n"
