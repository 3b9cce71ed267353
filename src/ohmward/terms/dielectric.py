"""One spelling for a dielectric that people write in several ways."""

_ONE_SPELLING = {
    "np0": "c0g",
    "npo": "c0g",
    "cog": "c0g",
    "cg": "c0g",
    "polypropylene": "pp",
    "polyester": "pet",
    "mkp": "pp",
    "mkt": "pet",
    "al": "aluminium",
    "aluminum": "aluminium",
    "aluminium electrolytic": "aluminium",
    "aluminum electrolytic": "aluminium",
    "electrolytic": "aluminium",
    "solid tantalum": "tantalum",
    "tantalum electrolytic": "tantalum",
}


def dielectric_key(written: str) -> str:
    """The lower-case name under which tables and sequences compare a dielectric; '' for none."""
    name = " ".join(written.casefold().split())
    return _ONE_SPELLING.get(name, name)
