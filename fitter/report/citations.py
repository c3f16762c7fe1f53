"""What a paper must cite, as BibTeX: only works that methods texts refer to."""

from __future__ import annotations

from collections.abc import Iterable

__all__ = ["SHORT", "bibliography"]

# key: (short form for plain text, BibTeX type, fields)
_WORKS: dict[str, tuple[str, str, dict[str, str]]] = {
    "Foreman-Mackey2013": (
        "Foreman-Mackey et al. 2013",
        "article",
        {
            "author": "Foreman-Mackey, Daniel and Hogg, David W. and Lang, Dustin and Goodman, Jonathan",
            "title": "{emcee}: The {MCMC} Hammer",
            "journal": "Publications of the Astronomical Society of the Pacific",
            "volume": "125",
            "pages": "306--312",
            "year": "2013",
            "doi": "10.1086/670067",
        },
    ),
    "Cappe2004": (
        "Cappé et al. 2004",
        "article",
        {
            "author": "Capp{\\'e}, Olivier and Guillin, Arnaud and Marin, Jean-Michel and Robert, Christian P.",
            "title": "Population {M}onte {C}arlo",
            "journal": "Journal of Computational and Graphical Statistics",
            "volume": "13",
            "pages": "907--929",
            "year": "2004",
        },
    ),
    "TerBraak2006": (
        "ter Braak 2006",
        "article",
        {
            "author": "ter Braak, Cajo J. F.",
            "title": "A {M}arkov chain {M}onte {C}arlo version of the genetic algorithm differential evolution",
            "journal": "Statistics and Computing",
            "volume": "16",
            "pages": "239--249",
            "year": "2006",
            "doi": "10.1007/s11222-006-8769-1",
        },
    ),
    "Goodman2010": (
        "Goodman & Weare 2010",
        "article",
        {
            "author": "Goodman, Jonathan and Weare, Jonathan",
            "title": "Ensemble samplers with affine invariance",
            "journal": "Communications in Applied Mathematics and Computational Science",
            "volume": "5",
            "pages": "65--80",
            "year": "2010",
            "doi": "10.2140/camcos.2010.5.65",
        },
    ),
    "Vehtari2021": (
        "Vehtari et al. 2021",
        "article",
        {
            "author": r"Vehtari, Aki and Gelman, Andrew and Simpson, Daniel and Carpenter, Bob and B{\"u}rkner, Paul-Christian",
            "title": "Rank-normalization, folding, and localization: an improved {$\\widehat{R}$} for assessing convergence of {MCMC}",
            "journal": "Bayesian Analysis",
            "volume": "16",
            "pages": "667--718",
            "year": "2021",
            "doi": "10.1214/20-BA1221",
        },
    ),
    "Harris2020": (
        "Harris et al. 2020",
        "article",
        {
            "author": "Harris, Charles R. and Millman, K. Jarrod and van der Walt, St{\\'e}fan J. and others",
            "title": "Array programming with {NumPy}",
            "journal": "Nature",
            "volume": "585",
            "pages": "357--362",
            "year": "2020",
            "doi": "10.1038/s41586-020-2649-2",
        },
    ),
    "Virtanen2020": (
        "Virtanen et al. 2020",
        "article",
        {
            "author": "Virtanen, Pauli and Gommers, Ralf and Oliphant, Travis E. and others",
            "title": "{SciPy} 1.0: fundamental algorithms for scientific computing in {Python}",
            "journal": "Nature Methods",
            "volume": "17",
            "pages": "261--272",
            "year": "2020",
            "doi": "10.1038/s41592-019-0686-2",
        },
    ),
    "Hogg1999": (
        "Hogg 1999",
        "misc",
        {
            "author": "Hogg, David W.",
            "title": "Distance measures in cosmology",
            "year": "1999",
            "note": "arXiv:astro-ph/9905116",
        },
    ),
    "Goliath2001": (
        "Goliath et al. 2001",
        "article",
        {
            "author": "Goliath, M. and Amanullah, R. and Astier, P. and Goobar, A. and Pain, R.",
            "title": "Supernovae and the nature of the dark energy",
            "journal": "Astronomy \\& Astrophysics",
            "volume": "380",
            "pages": "6--18",
            "year": "2001",
        },
    ),
    "Chevallier2001": (
        "Chevallier & Polarski 2001",
        "article",
        {
            "author": "Chevallier, Michel and Polarski, David",
            "title": "Accelerating universes with scaling dark matter",
            "journal": "International Journal of Modern Physics D",
            "volume": "10",
            "pages": "213--223",
            "year": "2001",
            "doi": "10.1142/S0218271801000822",
        },
    ),
    "Linder2003": (
        "Linder 2003",
        "article",
        {
            "author": "Linder, Eric V.",
            "title": "Exploring the expansion history of the universe",
            "journal": "Physical Review Letters",
            "volume": "90",
            "pages": "091301",
            "year": "2003",
            "doi": "10.1103/PhysRevLett.90.091301",
        },
    ),
    "Visser2004": (
        "Visser 2004",
        "article",
        {
            "author": "Visser, Matt",
            "title": "Jerk, snap and the cosmological equation of state",
            "journal": "Classical and Quantum Gravity",
            "volume": "21",
            "pages": "2603--2615",
            "year": "2004",
            "doi": "10.1088/0264-9381/21/11/006",
        },
    ),
    "Carroll1992": (
        "Carroll, Press & Turner 1992",
        "article",
        {
            "author": "Carroll, Sean M. and Press, William H. and Turner, Edwin L.",
            "title": "The cosmological constant",
            "journal": "Annual Review of Astronomy and Astrophysics",
            "volume": "30",
            "pages": "499--542",
            "year": "1992",
            "doi": "10.1146/annurev.aa.30.090192.002435",
        },
    ),
    "Hunter2007": (
        "Hunter 2007",
        "article",
        {
            "author": "Hunter, John D.",
            "title": "Matplotlib: a {2D} graphics environment",
            "journal": "Computing in Science \\& Engineering",
            "volume": "9",
            "pages": "90--95",
            "year": "2007",
            "doi": "10.1109/MCSE.2007.55",
        },
    ),
    "Foreman-Mackey2016": (
        "Foreman-Mackey 2016",
        "article",
        {
            "author": "Foreman-Mackey, Daniel",
            "title": "corner.py: scatterplot matrices in {Python}",
            "journal": "Journal of Open Source Software",
            "volume": "1",
            "pages": "24",
            "year": "2016",
            "doi": "10.21105/joss.00024",
        },
    ),
}

SHORT = {key: short for key, (short, _, _) in _WORKS.items()}
"""Citation key → short form for plain text."""


def bibliography(keys: Iterable[str]) -> str:
    """Return references.bib for the given keys, in their order.

    Raises
    ------
    KeyError
        A key that is not known.
    """
    entries = []
    for key in dict.fromkeys(keys):
        _, kind, given = _WORKS[key]
        body = ",\n".join(f"  {name} = {{{value}}}" for name, value in given.items())
        entries.append(f"@{kind}{{{key},\n{body}\n}}\n")
    return "\n".join(entries)
