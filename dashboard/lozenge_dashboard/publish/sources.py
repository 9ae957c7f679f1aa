"""The sources that the shown numbers rest on, chosen by what was computed."""

from __future__ import annotations

from typing import NamedTuple

from lozenge_dashboard.publish.facts import Facts
from lozenge_dashboard.publish.latex import escaped

__all__ = ["SOURCES", "Source", "bibliography", "list_text", "rested_on"]


class Source(NamedTuple):
    """A published work.

    Attributes
    ----------
    key, title, journal, arxiv : str
        Key to cite it by; title; where it appeared, empty if not known here; arXiv number.
    use : str
        What is taken from it.
    """

    key: str
    title: str
    journal: str
    arxiv: str
    use: str


SOURCES = {
    source.key: source
    for source in (
        Source(
            "propagators",
            "Particle propagators on discrete spacetime",
            "Class. Quantum Grav. 25 (2008) 202001",
            "0806.3083",
            "the retarded function on a causal set",
        ),
        Source(
            "ground-state",
            "A ground state for the causal diamond in 2 dimensions",
            "JHEP 10 (2012) 088",
            "1205.1296",
            "the Sorkin-Johnston state of the diamond",
        ),
        Source(
            "entropy",
            "Expressing entropy globally in terms of (4D) field-correlations",
            "",
            "1205.2953",
            "entropy from the two-point function",
        ),
        Source(
            "truncation",
            "Entanglement entropy in causal set theory",
            "Class. Quantum Grav. 35 (2018) 074004",
            "1611.10281",
            "the threshold √n/(4π) on patch and region",
        ),
        Source(
            "disjoint",
            "Entanglement entropy of disjoint spacetime intervals in causal set theory",
            "",
            "2110.07627",
            "the cut of several regions, by support",
        ),
        Source(
            "conformal",
            "Entanglement entropy and conformal field theory",
            "J. Phys. A 42 (2009) 504005",
            "0905.4013",
            "the reference slope",
        ),
        Source(
            "chain",
            "Entanglement entropy in free quantum field theory",
            "J. Phys. A 42 (2009) 504007",
            "0905.2562",
            "entropies of the harmonic chain",
        ),
        Source(
            "currents",
            "Entropy and modular Hamiltonian for a free chiral scalar in two intervals",
            "",
            "1809.00026",
            "mutual information of the current's algebra",
        ),
    )
}


def rested_on(facts: Facts) -> list[Source]:
    """The sources of what was computed.

    Parameters
    ----------
    facts : Facts
        What was computed.

    Returns
    -------
    list of Source
        In the order of the computation.
    """
    wanted = {
        "propagators": True,
        "ground-state": True,
        "entropy": facts.entropies,
        "truncation": facts.thresholds_used,
        "disjoint": facts.several and facts.entropies,
        "conformal": facts.reference_shown,
        "chain": facts.chain_shown,
        "currents": facts.currents_shown,
    }
    return [SOURCES[key] for key, chosen in wanted.items() if chosen]


def list_text(sources: list[Source]) -> str:
    """Sources as text.

    Parameters
    ----------
    sources : list of Source
        From `rested_on`.

    Returns
    -------
    str
        One paragraph each.
    """
    return "".join(
        f"“{s.title}”, {f'{s.journal}, ' if s.journal else ''}arXiv:{s.arxiv}\n    for {s.use}\n"
        for s in sources
    )


def bibliography(sources: list[Source]) -> str:
    """Sources as a LaTeX bibliography.

    Parameters
    ----------
    sources : list of Source
        From `rested_on`.

    Returns
    -------
    str
        An environment ``thebibliography``.
    """
    items = "".join(
        rf"\bibitem{{{s.key}}} \textit{{{escaped(s.title)}}}, "
        f"{escaped(s.journal) + ', ' if s.journal else ''}arXiv:{s.arxiv}.\n"
        for s in sources
    )
    return f"\\begin{{thebibliography}}{{{len(sources)}}}\n{items}\\end{{thebibliography}}\n"
