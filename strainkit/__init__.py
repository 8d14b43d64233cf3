"""strainkit: from one relaxed crystal to the fewest strained cells, and from their stresses to a stiffness tensor."""

__version__ = "0.1.0"
