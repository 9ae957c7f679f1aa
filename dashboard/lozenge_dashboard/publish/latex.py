"""Words as LaTeX that needs no package but booktabs."""

from __future__ import annotations

__all__ = ["escaped"]

SPECIAL = {
    "\\": r"\textbackslash{}",
    "{": r"\{",
    "}": r"\}",
    "$": r"\$",
    "&": r"\&",
    "#": r"\#",
    "%": r"\%",
    "_": r"\_",
    "^": r"\textasciicircum{}",
    "~": r"\textasciitilde{}",
    "<": r"$<$",
    ">": r"$>$",
    "|": r"\textbar{}",
    "\u202f": r"\,",
    "\u00a0": "~",
    "−": r"$-$",
    "–": "--",
    "×": r"$\times$",
    "√": r"$\surd$",
    "ρ": r"$\rho$",
    "é": r"\'e",
    "⁻": r"$^-$",
    **{raised: f"$^{digit}$" for digit, raised in enumerate("⁰¹²³⁴⁵⁶⁷⁸⁹")},
    "≤": r"$\le$",
    "≥": r"$\ge$",
    "Δ": r"$\Delta$",
    "Ω": r"$\Omega$",
    "α": r"$\alpha$",
    "δ": r"$\delta$",
    "η": r"$\eta$",
    "λ": r"$\lambda$",
    "π": r"$\pi$",
    "τ": r"$\tau$",
    "χ": r"$\chi$",
    "ℓ": r"$\ell$",
    "“": "``",
    "”": "''",
    "\u2019": "'",
}


def escaped(text: str) -> str:
    """Write words so that LaTeX sets them as they are.

    Parameters
    ----------
    text : str
        Words; letters beyond those known here are left as they are, as UTF-8.

    Returns
    -------
    str
        LaTeX.
    """
    return "".join(SPECIAL.get(letter, letter) for letter in text)
