"""One spelling for a dielectric, as sequences and their rules compare it."""

from ohmward.terms.dielectric import dielectric_key

__all__ = ["dielectric_key"]
