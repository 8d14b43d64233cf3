"""Strained cells on disk: cell writers and the run folder that holds them."""
