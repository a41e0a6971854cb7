"""Citations of the methods behind a run, by key, and the keys that belong to each part of a run."""

from __future__ import annotations

from collections.abc import Iterable

#: Key -> full citation. Only works the numbers rest on, or that a method is named after.
REFERENCES: dict[str, str] = {
    "bertini_2016": "B. Bertini, M. Collura, J. De Nardis and M. Fagotti, Transport in out-of-equilibrium "
    "XXZ chains: "
    "exact profiles of charges and currents, Phys. Rev. Lett. 117, 207201 (2016).",
    "castro_alvaredo_2016": "O. A. Castro-Alvaredo, B. Doyon and T. Yoshimura, Emergent hydrodynamics in "
    "integrable "
    "quantum systems out of equilibrium, Phys. Rev. X 6, 041065 (2016).",
    "de_nardis_2018": "J. De Nardis, D. Bernard and B. Doyon, Hydrodynamic diffusion in integrable systems, "
    "Phys. Rev. Lett. 121, 160603 (2018).",
    "doyon_2018": "B. Doyon, H. Spohn and T. Yoshimura, A geometric viewpoint on generalized hydrodynamics, "
    "Nucl. Phys. B 926, 570 (2018).",
    "eckart_1936": "C. Eckart and G. Young, The approximation of one matrix by another of lower rank, "
    "Psychometrika 1, 211 (1936).",
    "fagotti_2017": "M. Fagotti, Higher-order generalized hydrodynamics in one dimension: the noninteracting "
    "test, Phys. Rev. B 96, 220302 (2017).",
    "jordan_1928": "P. Jordan and E. Wigner, Über das Paulische Äquivalenzverbot, Z. Phys. 47, 631 (1928).",
    "karrasch_2012": "C. Karrasch, J. H. Bardarson and J. E. Moore, Finite-temperature dynamical density "
    "matrix "
    "renormalization group and the Drude weight of spin-1/2 chains, Phys. Rev. Lett. 108, 227206 (2012).",
    "mclachlan_1995": "R. I. McLachlan, On the numerical integration of ordinary differential equations by "
    "symmetric "
    "composition methods, SIAM J. Sci. Comput. 16, 151 (1995).",
    "pfeuty_1970": "P. Pfeuty, The one-dimensional Ising model with a transverse field, Ann. Phys. 57, 79 "
    "(1970).",
    "piroli_2017": "L. Piroli, J. De Nardis, M. Collura, B. Bertini and M. Fagotti, Transport in "
    "out-of-equilibrium XXZ chains: nonballistic behavior and correlation functions, Phys. Rev. B 96, 115124 "
    "(2017).",
    "strang_1968": "G. Strang, On the construction and comparison of difference schemes, SIAM J. Numer. "
    "Anal. 5, 506 "
    "(1968).",
    "takahashi_1972": "M. Takahashi and M. Suzuki, One-dimensional anisotropic Heisenberg model at finite "
    "temperatures, Prog. Theor. Phys. 48, 2187 (1972).",
    "takahashi_1999": "M. Takahashi, Thermodynamics of One-Dimensional Solvable Models, Cambridge University "
    "Press "
    "(1999).",
    "unfried_2023": "J. Unfried, J. Hauschild and F. Pollmann, Fast time evolution of matrix product states "
    "using "
    "the QR decomposition, Phys. Rev. B 107, 155133 (2023). The subspace cut is in the spirit of this work.",
    "verstraete_2004": "F. Verstraete, J. J. Garcia-Ripoll and J. I. Cirac, Matrix product density "
    "operators: "
    "simulation of finite-temperature and dissipative systems, Phys. Rev. Lett. 93, 207204 (2004).",
    "vidal_2004": "G. Vidal, Efficient simulation of one-dimensional quantum many-body systems, "
    "Phys. Rev. Lett. 93, 040502 (2004).",
}

#: Behind every quantum run: purification with the auxiliary copy evolved backwards, TEBD, the optimal cut,
#: and the scheme by which the start is prepared.
QUANTUM_KEYS: tuple[str, ...] = (
    "verstraete_2004",
    "karrasch_2012",
    "vidal_2004",
    "eckart_1936",
    "mclachlan_1995",
)

#: Behind the orders that a stretch study tells apart.
STRETCH_KEYS: tuple[str, ...] = ("de_nardis_2018", "fagotti_2017")

#: Behind the Suzuki-Trotter scheme of each order, and behind each method that cuts a bond.
TROTTER_KEYS: dict[int, tuple[str, ...]] = {2: ("strang_1968",), 4: ("mclachlan_1995",)}
CUT_KEYS: dict[str, tuple[str, ...]] = {"subspace": ("unfried_2023",)}

#: Behind every prediction at Euler scale.
EULER_KEYS: tuple[str, ...] = ("castro_alvaredo_2016", "bertini_2016")


def citations(keys: Iterable[str]) -> list[str]:
    """Return the citations of `keys`, each once and in the order first met; an unknown key stands as it is.

    keys : names of `REFERENCES`, as the dataset's attributes carry them
    """
    return [REFERENCES.get(key, key) for key in dict.fromkeys(key.strip() for key in keys if key.strip())]
