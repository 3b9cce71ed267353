"""What a failing test leaves behind: seed, transcripts, the instruments' records, the journal."""

import json
import re
import shutil
from pathlib import Path

from ohmward.instruments.transcript import escaped
from ohmward.testing.bench import VirtualBench

FILE = "bundle.json"


def folder_for(bundles: Path, test: str) -> Path:
    """The folder of a test's bundle, by the test's name."""
    return bundles / re.sub(r"[^A-Za-z0-9_.-]+", "-", test).strip("-")


def write(folder: Path, bench: VirtualBench, *, test: str, command: str) -> None:
    """Write the bundle anew. Raises OSError."""
    if folder.exists():
        shutil.rmtree(folder)
    (folder / "record").mkdir(parents=True)
    bench.transcripts.write(folder / "transcript")
    struck: dict[str, list[tuple[float, str]]] = {}
    if bench.simulated is not None:
        for name, record in bench.simulated.records.items():
            lines = (
                json.dumps({"at_s": one.at_s, "what": one.what, "data": escaped(one.data)})
                for one in record.entries
            )
            text = "".join(f"{line}\n" for line in lines)
            (folder / "record" / f"{name}.jsonl").write_text(text, "ascii")
            struck[name] = list(bench.simulated.layers[name].struck)
    if bench.journal is not None and bench.journal.is_file():
        shutil.copy(bench.journal, folder / "journal.sqlite")
        kept = bench.journal.parent / "transcript"  # of a run that ended, however it did
        if kept.is_dir():
            shutil.copytree(kept, folder / "transcript", dirs_exist_ok=True)
    content = {"test": test, "seed": bench.seed, "replay": command, "faults": struck}
    (folder / FILE).write_text(json.dumps(content, indent=1) + "\n", "utf-8")


def seed_of(folder: Path) -> int:
    """The seed of a bundle. Raises ValueError or OSError where there is none."""
    content = json.loads((folder / FILE).read_text("utf-8"))
    try:
        return int(content["seed"])
    except (KeyError, TypeError) as error:
        raise ValueError(f"{folder / FILE} is no bundle of a failed test") from error


def difference(folder: Path, bench: VirtualBench) -> str:
    """Where the instruments' side differs from the bundle's; '' when all is the same again."""
    if bench.simulated is None:
        return "no bench was run"
    for name, record in bench.simulated.records.items():
        path = folder / "record" / f"{name}.jsonl"
        before = path.read_text("ascii").splitlines() if path.is_file() else []
        now = [
            json.dumps({"at_s": one.at_s, "what": one.what, "data": escaped(one.data)})
            for one in record.entries
        ]
        for number, (was, is_) in enumerate(zip(before, now, strict=False), start=1):
            if was != is_:
                return f"{name}, entry {number}: was {was}, is {is_}"
        if len(before) != len(now):
            return f"{name}: {len(now)} entries, not {len(before)}"
    return ""
