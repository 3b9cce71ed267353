"""The words that cross boundaries: frozen, keyword-only models in SI base units."""
