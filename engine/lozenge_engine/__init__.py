"""Entanglement of sprinkled causal diamonds: points, modes, truncations, entropies, sweeps.

Start with `lozenge_engine.bench.Bench`; nothing here needs a page.
"""

__version__ = "0.1.0"
