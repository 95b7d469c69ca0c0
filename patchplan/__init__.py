"""patchplan: from a differential equation to an op-amp integrator circuit that obeys it."""

__version__ = "0.1.0"
