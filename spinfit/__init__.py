"""spinfit: from a measured magnetic-resonance trace to a g-tensor that stands up."""

__version__ = "0.1.0"
