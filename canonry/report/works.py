"""The works that methods rest on, by the keys under which sentences name them in brackets."""

from __future__ import annotations

from reference import find
from reference import names as references

__all__ = ["cited"]

_WORKS = {
    "baoab": "B. Leimkuhler, C. Matthews, J. Chem. Phys. 138, 174102 (2013)",
    "metropolised": "A. M. Horowitz, Phys. Lett. B 268, 247 (1991)",
    "obabo": "G. Bussi, M. Parrinello, Phys. Rev. E 75, 056707 (2007)",
    "velocity-verlet": "W. C. Swope, H. C. Andersen, P. H. Berens, K. R. Wilson, J. Chem. Phys. 76, 637 (1982)",
    "constant-energy": "J. L. Lebowitz, J. K. Percus, L. Verlet, Phys. Rev. 153, 250 (1967)",
    "phase-volume": "E. M. Pearson, T. Halicioglu, W. A. Tiller, Phys. Rev. A 32, 3030 (1985)",
    "gamma": "U. Wolff, Comput. Phys. Commun. 156, 143 (2004); erratum 176, 383 (2007)",
    "skewness": "P. Hall, Ann. Probab. 15, 920 (1987)",
    "reweighting": "M. R. Shirts, J. D. Chodera, J. Chem. Phys. 129, 124105 (2008)",
    "insertion": "B. Widom, J. Chem. Phys. 39, 2808 (1963)",
    "forces": "D. Borgis, R. Assaraf, B. Rotenberg, R. Vuilleumier, Mol. Phys. 111, 3486 (2013)",
    "averaged-fits": "W. I. Jay, E. T. Neil, Phys. Rev. D 103, 114502 (2021)",
    "process": "C. E. Rasmussen, C. K. I. Williams, Gaussian Processes for Machine Learning, MIT Press (2006)",
    "trends": "N. Cressie, Statistics for Spatial Data, Wiley (1993)",
}


def cited(text: str) -> dict[str, str]:
    """Key and full citation of every work that a text names in brackets, in the order of the text."""
    works = _WORKS | {name: str(find(name).source) for name in references()}
    found = sorted((text.index(f"[{key}]"), key) for key in works if f"[{key}]" in text)
    return {key: works[key] for _, key in found}
