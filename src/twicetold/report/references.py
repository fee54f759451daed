"""Works that the methods paragraph may cite, as they stand in a BibTeX file."""

from __future__ import annotations

from dataclasses import dataclass


@dataclass(frozen=True)
class Reference:
    """One work: BibTeX key, how it is cited in the text, entry type and fields."""

    key: str
    cited: str
    kind: str
    fields: tuple[tuple[str, str], ...]

    def bibtex(self) -> str:
        """Give the BibTeX entry."""
        body = ",\n".join(f"  {name} = {{{value}}}" for name, value in self.fields)
        return f"@{self.kind}{{{self.key},\n{body}\n}}\n"


_ARTICLE = ("author", "year", "title", "journal", "volume", "pages")


def _article(key: str, cited: str, *values: str) -> Reference:
    """Make the entry of an article from its fields, in the order of ``_ARTICLE``."""
    return Reference(key, cited, "article", tuple(zip(_ARTICLE, values, strict=True)))


_ALL = (
    _article("moran1950", "Moran 1950", "Moran, P. A. P.", "1950",
             "Notes on continuous stochastic phenomena", "Biometrika", "37", "17--23"),
    Reference("cliff1981", "Cliff & Ord 1981", "book", (
        ("author", "Cliff, A. D. and Ord, J. K."), ("year", "1981"),
        ("title", "Spatial Processes: Models and Applications"), ("publisher", "Pion"),
        ("address", "London"))),
    _article("gabriel1969", "Gabriel & Sokal 1969", "Gabriel, K. R. and Sokal, R. R.", "1969",
             "A new statistical approach to geographic variation analysis", "Systematic Zoology",
             "18", "259--278"),
    _article("plackett1975", "Plackett 1975", "Plackett, R. L.", "1975",
             "The analysis of permutations", "Applied Statistics", "24", "193--202"),
    _article("newman2001", "Newman & Ziff 2001", "Newman, M. E. J. and Ziff, R. M.", "2001",
             "Fast {Monte Carlo} algorithm for site or bond percolation", "Physical Review E",
             "64", "016706"),
    _article("besag1989", "Besag & Clifford 1989", "Besag, J. and Clifford, P.", "1989",
             "Generalized {Monte Carlo} significance tests", "Biometrika", "76", "633--642"),
    _article("strona2014", "Strona et al. 2014",
             "Strona, G. and Nappo, D. and Boccacci, F. and Fattorini, S. and San-Miguel-Ayanz, J.",
             "2014", "A fast and unbiased procedure to randomize ecological binary matrices with "
             "fixed row and column totals", "Nature Communications", "5", "4114"),
    _article("phipson2010", "Phipson & Smyth 2010", "Phipson, B. and Smyth, G. K.", "2010",
             "Permutation {P}-values should never be zero: calculating exact {P}-values when "
             "permutations are randomly drawn",
             "Statistical Applications in Genetics and Molecular Biology", "9", "39"),
    _article("tarone1990", "Tarone 1990", "Tarone, R. E.", "1990",
             "A modified {Bonferroni} method for discrete data", "Biometrics", "46", "515--522"),
    _article("benjamini1995", "Benjamini & Hochberg 1995", "Benjamini, Y. and Hochberg, Y.", "1995",
             "Controlling the false discovery rate: a practical and powerful approach to multiple "
             "testing", "Journal of the Royal Statistical Society, Series B", "57", "289--300"),
    _article("benjamini2001", "Benjamini & Yekutieli 2001", "Benjamini, Y. and Yekutieli, D.",
             "2001", "The control of the false discovery rate in multiple testing under "
             "dependency", "The Annals of Statistics", "29", "1165--1188"),
    _article("harris1974", "Harris 1974", "Harris, T. E.", "1974",
             "Contact interactions on a lattice", "The Annals of Probability", "2", "969--988"),
    _article("fisher1943", "Fisher, Corbet & Williams 1943",
             "Fisher, R. A. and Corbet, A. S. and Williams, C. B.", "1943",
             "The relation between the number of species and the number of individuals in a random "
             "sample of an animal population", "Journal of Animal Ecology", "12", "42--58"),
    _article("kendall1948", "Kendall 1948", "Kendall, D. G.", "1948",
             "On some modes of population growth leading to {R. A. Fisher's} logarithmic series "
             "distribution", "Biometrika", "35", "6--15"),
    _article("berger1994", "Berger & Boos 1994", "Berger, R. L. and Boos, D. D.", "1994",
             "{P} values maximized over a confidence set for the nuisance parameter",
             "Journal of the American Statistical Association", "89", "1012--1016"),
    Reference("talts2018", "Talts et al. 2018", "misc", (
        ("author", "Talts, S. and Betancourt, M. and Simpson, D. and Vehtari, A. and Gelman, A."),
        ("year", "2018"),
        ("title", "Validating {Bayesian} inference algorithms with simulation-based calibration"),
        ("note", "arXiv:1804.06788"))),
)  # fmt: skip

BY_KEY = {reference.key: reference for reference in _ALL}


def cite(*keys: str) -> str:
    """Give the citation as it stands in the text, in brackets."""
    return f"({'; '.join(BY_KEY[key].cited for key in keys)})"


def bibtex(keys: list[str]) -> str:
    """Give the BibTeX entries of these works, each once, in order of key."""
    return "\n".join(BY_KEY[key].bibtex() for key in sorted(set(keys)))
