"""The parts of a lot as they really are: each row with its make, drawn by the seed."""

from collections.abc import Mapping, Sequence
from functools import cache
from pathlib import Path

from ohmward.sim.parts import PhysicalPart
from ohmward.sim.physical import PartModel, PartTruth, PhysicalFileError, read_model

# The make of a part that no physical file knows, by what its row says; the first that fits.
_BY_DIELECTRIC = (
    (("c0g", "np0", "class 1"), "ceramic-c0g"),
    (("x7r", "x5r", "y5v", "x7s", "z5u", "class 2", "ceramic"), "ceramic-x7r"),
    (("aluminium", "aluminum", "electrolytic", "tantalum"), "aluminium-electrolytic"),
    (("pet", "mylar", "polyester"), "film-pet"),
    (("pp", "polypropylene", "pps", "film"), "film-pp"),
)
_BY_KIND = {"inductor": "choke-ferrite", "resistor": "resistor-film"}


def make_of(row: Mapping[str, object]) -> str:
    """The name of the model that suits a row best: by kind, dielectric and polarity."""
    kind = str(row["kind"])
    if kind in _BY_KIND:
        return _BY_KIND[kind]
    dielectric = str(row.get("dielectric") or "").lower()
    for words, make in _BY_DIELECTRIC:
        if any(word in dielectric for word in words):
            return make
    return "aluminium-electrolytic" if row.get("polarity") == "polar" else "film-pp"


class Models:
    """Part models by name, from the first folder that has them."""

    def __init__(self, folders: Sequence[Path]) -> None:
        self._folders = tuple(folders)
        self._read = cache(self._find)

    def __getitem__(self, name: str) -> PartModel:
        return self._read(name)

    def _find(self, name: str) -> PartModel:
        for folder in self._folders:
            path = folder / f"{name}.toml"
            if path.is_file():
                return read_model(path)
        looked = ", ".join(str(folder) for folder in self._folders) or "nowhere"
        raise PhysicalFileError(f"no part model is called {name}; looked in {looked}")


def fill(
    rows: Sequence[Mapping[str, object]],
    truths: Mapping[str, PartTruth],
    models: Models,
    seed: int,
) -> dict[str, PhysicalPart]:
    """Every part of the lot by its id; one without a truth is a good part of a likely make."""
    parts: dict[str, PhysicalPart] = {}
    for row in rows:
        part_id = str(row["part_id"])
        truth = truths.get(part_id) or PartTruth(model=make_of(row))
        parts[part_id] = PhysicalPart(
            part_id=part_id,
            model=models[truth.model],
            truth=truth,
            nominal=_number(row, "nominal"),
            tolerance=max(-_number(row, "tolerance_low"), _number(row, "tolerance_high")) or 0.05,
            rated_v=_number(row, "rated_v") or 1.414 * _number(row, "rated_ac_v"),
            rated_a=_number(row, "rated_a"),
            seed=seed,
        )
    return parts


def _number(row: Mapping[str, object], key: str) -> float:
    value = row.get(key)
    return float(value) if isinstance(value, int | float) else 0.0
