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


def _article(authors: str, title: str, place: str, doi: str = "") -> Article:
    """Return an article from its authors, title and ``Journal volume, page (year)``."""
    found = re.fullmatch(r"(.+) (\S+), (\S+) \((\d{4})\)", place)
    assert found is not None, place
    journal, volume, page, year = found.groups()
    if journal.startswith("Phys. Rev. "):  # follows from the place
        series = journal.removeprefix("Phys. Rev. ").rstrip(".")
        doi = f"10.1103/PhysRev{series}.{volume}.{page}"
    names = tuple(authors.split("; "))
    return Article(names, title, journal, volume, page, int(year), doi)


PROGRAM = Program(
    "the trajcage developers",
    "trajcage: exact cages, free volumes and cage breaking of hard spheres and colloids",
    "BSD-3-Clause",
)

#: Libraries whose authors ask to be cited.
BUILT_ON = (
    _article(
        "Michaud-Agrawal, Naveen; Denning, Elizabeth J.; Woolf, Thomas B.; Beckstein, Oliver",
        "MDAnalysis: A toolkit for the analysis of molecular dynamics simulations",
        "Journal of Computational Chemistry 32, 2319 (2011)",
        "10.1002/jcc.21787",
    ),
    _article(
        "Ramasubramani, Vyas; Dice, Bradley D.; Harper, Eric S.; Spellings, Matthew P.; Anderson, Joshua A.; Glotzer, Sharon C.",
        "freud: A software suite for high throughput analysis of particle simulation data",
        "Computer Physics Communications 254, 107275 (2020)",
        "10.1016/j.cpc.2020.107275",
    ),
)

_FREE_VOLUME = _article(
    "Sastry, S.; Truskett, T. M.; Debenedetti, P. G.; Torquato, S.; Stillinger, F. H.",
    "Free volume in the hard sphere liquid",
    "Mol. Phys. 95, 289 (1998)",
)
_PRESSURE = (
    _article(
        "Hoover, W. G.; Ashurst, W. T.; Grover, R.",
        "Exact dynamical basis for a fluctuating cell model",
        "J. Chem. Phys. 57, 1259 (1972)",
    ),
    _article(
        "Speedy, R. J.",
        "Accurate theory of the hard sphere fluid",
        "J. Chem. Soc. Faraday Trans. 2 76, 693 (1980)",
    ),
    _article(
        "Corti, D. S.; Bowles, R. K.",
        "Statistical geometry of hard sphere systems: exact relations for additive and non-additive mixtures",
        "Mol. Phys. 96, 1623 (1999)",
    ),
)
_CELLS = _article(
    "Gellatly, B. J.; Finney, J. L.",
    "Characterisation of models of multicomponent amorphous metals: the radical alternative to the Voronoi polyhedron",
    "J. Non-Cryst. Solids 50, 313 (1982)",
)
_CELL_SHAPE = _article(
    "Aste, T.; Di Matteo, T.",
    "Emergence of Gamma distributions in granular materials and packing models",
    "Phys. Rev. E 77, 021309 (2008)",
)
_ORDER = (
    _article(
        "Steinhardt, P. J.; Nelson, D. R.; Ronchetti, M.",
        "Bond-orientational order in liquids and glasses",
        "Phys. Rev. B 28, 784 (1983)",
    ),
    _article(
        "Lechner, W.; Dellago, C.",
        "Accurate determination of crystal structures based on averaged local bond order parameters",
        "J. Chem. Phys. 129, 114707 (2008)",
    ),
)
_FACETS = _article(
    "Mickel, W.; Kapfer, S. C.; Schröder-Turk, G. E.; Mecke, K.",
    "Shortcomings of the bond orientational order parameters for the analysis of disordered particulate matter",
    "J. Chem. Phys. 138, 044501 (2013)",
)
_SOLID = _article(
    "Filion, L.; Hermes, M.; Ni, R.; Dijkstra, M.",
    "Crystal nucleation of hard spheres using molecular dynamics, umbrella sampling, and forward flux sampling: A comparison of simulation techniques",
    "J. Chem. Phys. 133, 244115 (2010)",
)
_RATTLERS = (
    _article(
        "Torquato, S.; Stillinger, F. H.",
        "Multiplicity of generation, selection, and classification procedures for jammed hard-particle packings",
        "J. Phys. Chem. B 105, 11849 (2001)",
    ),
    _article(
        "Atkinson, S.; Stillinger, F. H.; Torquato, S.",
        "Detailed characterization of rattlers in exactly isostatic, strictly jammed sphere packings",
        "Phys. Rev. E 88, 062208 (2013)",
    ),
)
_BREAKING = _article(
    "Yamamoto, R.; Onuki, A.",
    "Dynamics of highly supercooled liquids: Heterogeneity, rheology, and diffusion",
    "Phys. Rev. E 58, 3515 (1998)",
)
_SURVIVAL = (
    _article(
        "Kaplan, E. L.; Meier, P.",
        "Nonparametric estimation from incomplete observations",
        "J. Am. Stat. Assoc. 53, 457 (1958)",
    ),
    _article(
        "Jung, Y.; Garrahan, J. P.; Chandler, D.",
        "Excitation lines and the breakdown of Stokes-Einstein relations in supercooled liquids",
        "Phys. Rev. E 69, 061205 (2004)",
    ),
)
_JUMPS = (
    _article(
        "Candelier, R.; Widmer-Cooper, A.; Kummerfeld, J. K.; Dauchot, O.; Biroli, G.; Harrowell, P.; Reichman, D. R.",
        "Spatiotemporal hierarchy of relaxation events, dynamical heterogeneities, and structural reorganization in a supercooled liquid",
        "Phys. Rev. Lett. 105, 135702 (2010)",
    ),
    _article(
        "Smessaert, A.; Rottler, J.",
        "Distribution of local relaxation events in an aging three-dimensional glass: Spatiotemporal correlation and dynamical heterogeneity",
        "Phys. Rev. E 88, 022314 (2013)",
    ),
)
_PATHS = _article(
    "von Bülow, S.; Bullerjahn, J. T.; Hummer, G.",
    "Systematic errors in diffusion coefficients from long-time molecular dynamics simulations at constant pressure",
    "J. Chem. Phys. 153, 021101 (2020)",
)
_ERRORS = (
    _article(
        "Flyvbjerg, H.; Petersen, H. G.",
        "Error estimates on averages of correlated data",
        "J. Chem. Phys. 91, 461 (1989)",
    ),
    _article(
        "Lee, R. M.; Conduit, G. J.; Nemec, N.; López Ríos, P.; Drummond, N. D.",
        "Strategies for improving the efficiency of quantum Monte Carlo calculations",
        "Phys. Rev. E 83, 066706 (2011)",
    ),
)
_SOFT = (
    _article(
        "Barker, J. A.; Henderson, D.",
        "Perturbation theory and equation of state for fluids. II. A successful theory of liquids",
        "J. Chem. Phys. 47, 4714 (1967)",
    ),
    _article(
        "Weeks, J. D.; Chandler, D.; Andersen, H. C.",
        "Role of repulsive forces in determining the equilibrium structure of simple liquids",
        "J. Chem. Phys. 54, 5237 (1971)",
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
        "Kolafa, J.; Labík, S.; Malijevský, A.",
        "Accurate equation of state of the hard sphere fluid in stable and metastable regions",
        "Phys. Chem. Chem. Phys. 6, 2335 (2004)",
    ),
    _article(
        "Carnahan, N. F.; Starling, K. E.",
        "Equation of state for nonattracting rigid spheres",
        "J. Chem. Phys. 51, 635 (1969)",
    ),
    _article(
        "Kolafa, J.; Rottner, M.",
        "Simulation-based equation of state of the hard disk fluid and prediction of higher-order virial coefficients",
        "Mol. Phys. 104, 3435 (2006)",
    ),
    _article(
        "Santos, A.; López de Haro, M.; Bravo Yuste, S.",
        "An accurate and simple equation of state for hard disks",
        "J. Chem. Phys. 103, 4622 (1995)",
    ),
    _article(
        "Henderson, D.",
        "A simple equation of state for hard discs",
        "Mol. Phys. 30, 971 (1975)",
    ),
    _article(
        "Boublík, T.", "Hard-sphere equation of state", "J. Chem. Phys. 53, 471 (1970)"
    ),
    _article(
        "Mansoori, G. A.; Carnahan, N. F.; Starling, K. E.; Leland, T. W.",
        "Equilibrium thermodynamic properties of the mixture of hard spheres",
        "J. Chem. Phys. 54, 1523 (1971)",
    ),
    _article(
        "Santos, A.; Bravo Yuste, S.; López de Haro, M.",
        "Equation of state of a multicomponent d-dimensional hard-sphere fluid",
        "Mol. Phys. 96, 1 (1999)",
    ),
    _article(
        "Hall, K. R.",
        "Another hard-sphere equation of state",
        "J. Chem. Phys. 57, 2252 (1972)",
    ),
    _article(
        "Speedy, R. J.",
        "Pressure and entropy of hard-sphere crystals",
        "J. Phys.: Condens. Matter 10, 4387 (1998)",
    ),
    _article(
        "Almarza, N. G.",
        "A cluster algorithm for Monte Carlo simulation at constant pressure",
        "J. Chem. Phys. 130, 184106 (2009)",
    ),
    _article(
        "Alder, B. J.; Hoover, W. G.; Young, D. A.",
        "Studies in molecular dynamics. V. High-density equation of state and entropy for hard disks and spheres",
        "J. Chem. Phys. 49, 3688 (1968)",
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
