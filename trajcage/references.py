"""What to cite: the program, what it builds on, and the methods behind each quantity.

Bibliographic data are from memory of the publications; DOIs stand only where they were
looked up or follow from journal, volume and page.
"""

import re
from collections.abc import Collection, Iterable
from dataclasses import dataclass

__all__ = [
    "BUILT_ON",
    "EQUATIONS",
    "METHODS",
    "PROGRAM",
    "Article",
    "Program",
    "cited_for",
]


@dataclass(frozen=True)
class Article:
    """A published article.

    Parameters
    ----------
    authors : tuple of str
        Each as ``Family, I. J.``.
    title, journal : str
        Its title and the abbreviated journal.
    volume, page, year : str, str, int
        Where it stands.
    doi : str
        Digital object identifier; empty if not known.
    """

    authors: tuple[str, ...]
    title: str
    journal: str
    volume: str
    page: str
    year: int
    doi: str = ""

    @property
    def place(self) -> str:
        """Journal, volume and page, as in the sources named in result files."""
        return f"{self.journal} {self.volume}, {self.page}"

    def __str__(self) -> str:
        doi = f", doi:{self.doi}" if self.doi else ""
        authors = "; ".join(self.authors)
        return f"{authors}: {self.title}. {self.place} ({self.year}){doi}"

    def bibtex(self) -> str:
        """Return a BibTeX entry."""
        family = "".join(c for c in self.authors[0].partition(",")[0] if c.isalpha())
        fields = {
            "author": " and ".join(self.authors),
            "title": f"{{{self.title}}}",
            "journal": self.journal,
            "volume": self.volume,
            "pages": self.page,
            "year": str(self.year),
            "doi": self.doi,
        }
        return _entry("article", f"{family.lower()}{self.year}p{self.page}", fields)


@dataclass(frozen=True)
class Program:
    """A program.

    Parameters
    ----------
    author, title, license : str
        Who wrote it, what it is, and its SPDX license.
    """

    author: str
    title: str
    license: str

    def text(self, version: str) -> str:
        """Return the citation of one version."""
        return f"{self.author}: {self.title}. Version {version} ({self.license})"

    def bibtex(self, version: str) -> str:
        """Return a BibTeX entry for one version."""
        fields = {
            "author": f"{{{self.author}}}",
            "title": f"{{{self.title}}}",
            "version": version,
            "note": f"{self.license}, version {version}",
        }
        return _entry("misc", "trajcage", fields)


def _entry(kind: str, key: str, fields: dict[str, str]) -> str:
    lines = [f"  {name} = {{{value}}}," for name, value in fields.items() if value]
    return "\n".join([f"@{kind}{{{key},", *lines, "}"])


PROGRAM = Program(
    "the trajcage developers",
    "trajcage: exact cages, free volumes and cage breaking of hard spheres and colloids",
    "BSD-3-Clause",
)

#: Libraries whose authors ask to be cited.
BUILT_ON = (
    Article(
        (
            "Michaud-Agrawal, Naveen",
            "Denning, Elizabeth J.",
            "Woolf, Thomas B.",
            "Beckstein, Oliver",
        ),
        "MDAnalysis: A toolkit for the analysis of molecular dynamics simulations",
        "Journal of Computational Chemistry",
        "32",
        "2319",
        2011,
        "10.1002/jcc.21787",
    ),
    Article(
        (
            "Ramasubramani, Vyas",
            "Dice, Bradley D.",
            "Harper, Eric S.",
            "Spellings, Matthew P.",
            "Anderson, Joshua A.",
            "Glotzer, Sharon C.",
        ),
        "freud: A software suite for high throughput analysis of particle simulation "
        "data",
        "Computer Physics Communications",
        "254",
        "107275",
        2020,
        "10.1016/j.cpc.2020.107275",
    ),
)


def _physical_review(
    series: str, volume: str, page: str, year: int, title: str, *authors: str
) -> Article:
    """Return an article whose DOI follows from its place."""
    doi = f"10.1103/PhysRev{series.rstrip('.')}.{volume}.{page}"
    return Article(authors, title, f"Phys. Rev. {series}", volume, page, year, doi)


def _article(
    journal: str, volume: str, page: str, year: int, title: str, *authors: str
) -> Article:
    return Article(authors, title, journal, volume, page, year)


_CHEMICAL = "J. Chem. Phys."
_MOLECULAR = "Mol. Phys."

_FREE_VOLUME = _article(
    _MOLECULAR,
    "95",
    "289",
    1998,
    "Free volume in the hard sphere liquid",
    "Sastry, S.",
    "Truskett, T. M.",
    "Debenedetti, P. G.",
    "Torquato, S.",
    "Stillinger, F. H.",
)
_PRESSURE = (
    _article(
        _CHEMICAL,
        "57",
        "1259",
        1972,
        "Exact dynamical basis for a fluctuating cell model",
        "Hoover, W. G.",
        "Ashurst, W. T.",
        "Grover, R.",
    ),
    _article(
        "J. Chem. Soc. Faraday Trans. 2",
        "76",
        "693",
        1980,
        "Accurate theory of the hard sphere fluid",
        "Speedy, R. J.",
    ),
    _article(
        _MOLECULAR,
        "96",
        "1623",
        1999,
        "Statistical geometry of hard sphere systems: exact relations for additive and "
        "non-additive mixtures",
        "Corti, D. S.",
        "Bowles, R. K.",
    ),
)
_CELLS = _article(
    "J. Non-Cryst. Solids",
    "50",
    "313",
    1982,
    "Characterisation of models of multicomponent amorphous metals: the radical "
    "alternative to the Voronoi polyhedron",
    "Gellatly, B. J.",
    "Finney, J. L.",
)
_CELL_SHAPE = _physical_review(
    "E",
    "77",
    "021309",
    2008,
    "Emergence of Gamma distributions in granular materials and packing models",
    "Aste, T.",
    "Di Matteo, T.",
)
_ORDER = (
    _physical_review(
        "B",
        "28",
        "784",
        1983,
        "Bond-orientational order in liquids and glasses",
        "Steinhardt, P. J.",
        "Nelson, D. R.",
        "Ronchetti, M.",
    ),
    _article(
        _CHEMICAL,
        "129",
        "114707",
        2008,
        "Accurate determination of crystal structures based on averaged local bond order "
        "parameters",
        "Lechner, W.",
        "Dellago, C.",
    ),
)
_FACETS = _article(
    _CHEMICAL,
    "138",
    "044501",
    2013,
    "Shortcomings of the bond orientational order parameters for the analysis of "
    "disordered particulate matter",
    "Mickel, W.",
    "Kapfer, S. C.",
    "Schröder-Turk, G. E.",
    "Mecke, K.",
)
_SOLID = _article(
    _CHEMICAL,
    "133",
    "244115",
    2010,
    "Crystal nucleation of hard spheres using molecular dynamics, umbrella sampling, and "
    "forward flux sampling: A comparison of simulation techniques",
    "Filion, L.",
    "Hermes, M.",
    "Ni, R.",
    "Dijkstra, M.",
)
_RATTLERS = (
    _article(
        "J. Phys. Chem. B",
        "105",
        "11849",
        2001,
        "Multiplicity of generation, selection, and classification procedures for jammed "
        "hard-particle packings",
        "Torquato, S.",
        "Stillinger, F. H.",
    ),
    _physical_review(
        "E",
        "88",
        "062208",
        2013,
        "Detailed characterization of rattlers in exactly isostatic, strictly jammed "
        "sphere packings",
        "Atkinson, S.",
        "Stillinger, F. H.",
        "Torquato, S.",
    ),
)
_BREAKING = _physical_review(
    "E",
    "58",
    "3515",
    1998,
    "Dynamics of highly supercooled liquids: Heterogeneity, rheology, and diffusion",
    "Yamamoto, R.",
    "Onuki, A.",
)
_SURVIVAL = (
    _article(
        "J. Am. Stat. Assoc.",
        "53",
        "457",
        1958,
        "Nonparametric estimation from incomplete observations",
        "Kaplan, E. L.",
        "Meier, P.",
    ),
    _physical_review(
        "E",
        "69",
        "061205",
        2004,
        "Excitation lines and the breakdown of Stokes-Einstein relations in supercooled "
        "liquids",
        "Jung, Y.",
        "Garrahan, J. P.",
        "Chandler, D.",
    ),
)
_JUMPS = (
    _physical_review(
        "Lett.",
        "105",
        "135702",
        2010,
        "Spatiotemporal hierarchy of relaxation events, dynamical heterogeneities, and "
        "structural reorganization in a supercooled liquid",
        "Candelier, R.",
        "Widmer-Cooper, A.",
        "Kummerfeld, J. K.",
        "Dauchot, O.",
        "Biroli, G.",
        "Harrowell, P.",
        "Reichman, D. R.",
    ),
    _physical_review(
        "E",
        "88",
        "022314",
        2013,
        "Distribution of local relaxation events in an aging three-dimensional glass: "
        "Spatiotemporal correlation and dynamical heterogeneity",
        "Smessaert, A.",
        "Rottler, J.",
    ),
)
_PATHS = _article(
    _CHEMICAL,
    "153",
    "021101",
    2020,
    "Systematic errors in diffusion coefficients from long-time molecular dynamics "
    "simulations at constant pressure",
    "von Bülow, S.",
    "Bullerjahn, J. T.",
    "Hummer, G.",
)
_ERRORS = (
    _article(
        _CHEMICAL,
        "91",
        "461",
        1989,
        "Error estimates on averages of correlated data",
        "Flyvbjerg, H.",
        "Petersen, H. G.",
    ),
    _physical_review(
        "E",
        "83",
        "066706",
        2011,
        "Strategies for improving the efficiency of quantum Monte Carlo calculations",
        "Lee, R. M.",
        "Conduit, G. J.",
        "Nemec, N.",
        "López Ríos, P.",
        "Drummond, N. D.",
    ),
)
_SOFT = (
    _article(
        _CHEMICAL,
        "47",
        "4714",
        1967,
        "Perturbation theory and equation of state for fluids. II. A successful theory "
        "of liquids",
        "Barker, J. A.",
        "Henderson, D.",
    ),
    _article(
        _CHEMICAL,
        "54",
        "5237",
        1971,
        "Role of repulsive forces in determining the equilibrium structure of simple "
        "liquids",
        "Weeks, J. D.",
        "Chandler, D.",
        "Andersen, H. C.",
    ),
)

#: Articles behind the quantities of a result file: names of fields, tables and
#: arrays, and what they rest on. Two names are no fields: ``errors of
#: means``, and ``wca diameter`` for one given as ``wca:...``.
METHODS: tuple[tuple[tuple[str, ...], tuple[Article, ...]], ...] = (
    (("wca diameter",), _SOFT),
    (("free_volume", "free_surface"), (_FREE_VOLUME,)),
    (("compressibility_factor", "reduced_pressure"), _PRESSURE),
    (("cell_volume", "local_packing_fraction"), (_CELLS,)),
    (("cell_volume_shape",), (_CELL_SHAPE,)),
    (("qbar4", "qbar6", "wbar4", "wbar6"), (*_ORDER, _FACETS)),
    (("psi4", "psi6"), (_FACETS,)),
    (("solid_bonds",), (_SOLID,)),
    (("rattler", "rattler_plateau"), _RATTLERS),
    (("events", "cage_breaks"), (_BREAKING,)),
    (("survival", "persistence"), _SURVIVAL),
    (("jumps",), _JUMPS),
    (("correlations",), (_PATHS,)),
    (("errors of means",), _ERRORS),
)

#: Articles behind the equations of state that a summary may name.
EQUATIONS = (
    _article(
        "Phys. Chem. Chem. Phys.",
        "6",
        "2335",
        2004,
        "Accurate equation of state of the hard sphere fluid in stable and metastable "
        "regions",
        "Kolafa, J.",
        "Labík, S.",
        "Malijevský, A.",
    ),
    _article(
        _CHEMICAL,
        "51",
        "635",
        1969,
        "Equation of state for nonattracting rigid spheres",
        "Carnahan, N. F.",
        "Starling, K. E.",
    ),
    _article(
        _MOLECULAR,
        "104",
        "3435",
        2006,
        "Simulation-based equation of state of the hard disk fluid and prediction of "
        "higher-order virial coefficients",
        "Kolafa, J.",
        "Rottner, M.",
    ),
    _article(
        _CHEMICAL,
        "103",
        "4622",
        1995,
        "An accurate and simple equation of state for hard disks",
        "Santos, A.",
        "López de Haro, M.",
        "Bravo Yuste, S.",
    ),
    _article(
        _MOLECULAR,
        "30",
        "971",
        1975,
        "A simple equation of state for hard discs",
        "Henderson, D.",
    ),
    _article(
        _CHEMICAL, "53", "471", 1970, "Hard-sphere equation of state", "Boublík, T."
    ),
    _article(
        _CHEMICAL,
        "54",
        "1523",
        1971,
        "Equilibrium thermodynamic properties of the mixture of hard spheres",
        "Mansoori, G. A.",
        "Carnahan, N. F.",
        "Starling, K. E.",
        "Leland, T. W.",
    ),
    _article(
        _MOLECULAR,
        "96",
        "1",
        1999,
        "Equation of state of a multicomponent d-dimensional hard-sphere fluid",
        "Santos, A.",
        "Bravo Yuste, S.",
        "López de Haro, M.",
    ),
    _article(
        _CHEMICAL,
        "57",
        "2252",
        1972,
        "Another hard-sphere equation of state",
        "Hall, K. R.",
    ),
    _article(
        "J. Phys.: Condens. Matter",
        "10",
        "4387",
        1998,
        "Pressure and entropy of hard-sphere crystals",
        "Speedy, R. J.",
    ),
    _article(
        _CHEMICAL,
        "130",
        "184106",
        2009,
        "A cluster algorithm for Monte Carlo simulation at constant pressure",
        "Almarza, N. G.",
    ),
    _article(
        _CHEMICAL,
        "49",
        "3688",
        1968,
        "Studies in molecular dynamics. V. High-density equation of state and entropy "
        "for hard disks and spheres",
        "Alder, B. J.",
        "Hoover, W. G.",
        "Young, D. A.",
    ),
)


def _is_in(article: Article, text: str) -> bool:
    return re.search(rf"{re.escape(article.place)}(?!\d)", text) is not None


def cited_for(
    names: Collection[str], sources: Iterable[str]
) -> list[tuple[str, tuple[Article, ...]]]:
    """Return what the quantities of a result file rest on.

    Parameters
    ----------
    names : collection of str
        Quantities in the file, in the words of :data:`METHODS`.
    sources : iterable of str
        Sources of the equations of state that stand beside them.

    Returns
    -------
    list of tuple
        Quantities, listed, and the articles behind them.
    """
    found = []
    for quantities, articles in METHODS:
        used = [name for name in quantities if name in names]
        if used:
            found.append((", ".join(used), articles))
    told = "; ".join(sources)
    compared = tuple(article for article in EQUATIONS if _is_in(article, told))
    if compared:
        found.append(("equations of state", compared))
    return found
