"""Bad input at the command line: exit 2, every problem in one go, nothing opened or written."""

import os
import socket
from collections.abc import Callable, Iterator
from contextlib import contextmanager
from pathlib import Path

import pytest
from tests.cli.told import Ohmward, Told

from ohmward.setup.resources import shipped

SEQUENCE = (shipped("sequences") / "film-sweep.toml").read_text("utf-8")
BENCH = (shipped("simulators") / "depot-bench.toml").read_text("utf-8")
PARTS = (shipped("simulators") / "depot-lot.csv").read_text("utf-8")
FILMS = "".join(PARTS.splitlines(keepends=True)[:6])
POLAR = "C1,1,capacitor,100 uF,±20 %,63 V DC,,,,aluminium electrolytic,polar,\n"
HEADING = PARTS.splitlines()[0] + "\n"

Change = Callable[[str], str]


def written(text: str, *, was: str, now: str) -> str:
    """The text with one thing changed; fails where that thing is not there."""
    assert was in text, f"{was!r} is not in what ships"
    return text.replace(was, now, 1)


class Files:
    """A sequence, a bench and a parts list in a folder of the test's own."""

    def __init__(self, folder: Path) -> None:
        self.folder = folder
        for name in ("depot-physics.toml", "depot-standards.toml"):
            (folder / name).write_bytes((shipped("simulators") / name).read_bytes())
        self.write("s.toml", SEQUENCE)
        self.write("b.toml", BENCH)
        self.write("p.csv", FILMS)

    def write(self, name: str, text: str | bytes) -> None:
        """Write one of the files."""
        data = text.encode("utf-8") if isinstance(text, str) else text
        (self.folder / name).write_bytes(data)

    def listing(self) -> dict[str, float]:
        """Every file of the folder and when it was changed."""
        return {str(path): path.lstat().st_mtime_ns for path in self.folder.rglob("*")}


NAMES = ("s.toml", "--bench", "b.toml", "--parts", "p.csv")


@pytest.fixture
def files(tmp_path: Path) -> Files:
    return Files(tmp_path)


@pytest.fixture
def refused(ohmward: Ohmward, files: Files, monkeypatch: pytest.MonkeyPatch) -> Callable[..., Told]:
    """Run a command that must be refused: as JSON and as text, with nothing opened or written."""

    def no_socket(*_: object, **__: object) -> None:
        raise AssertionError("a socket was opened")

    def run(*arguments: str) -> Told:
        monkeypatch.setattr(socket.socket, "connect", no_socket)
        before = files.listing()
        as_json = ohmward("brief", *(arguments or NAMES), "--json")
        assert as_json.problems
        assert as_json.err == ""
        for command in ("dryrun", "run"):
            told = ohmward(command, *(arguments or NAMES), "--out", "out")
            assert told.code == 2
            assert told.out == ""
            for problem in as_json.problems:
                assert f"[{problem['id']}]" in told.err
                assert f"{problem['file']}: {problem['key']}: " in told.err
        assert files.listing() == before
        return as_json

    return run


# id expected, file, key as a person would look for it, what is changed
SEQUENCES = [
    ("unknown-key", "stage[1].frequncy", 'frequency = { from = "100', 'frequncy = { from = "100'),
    ("wrong-unit-or-value", "stage[1].level", 'level = "1 V"', 'level = "1 A"'),
    ("wrong-unit-or-value", "stage[1].dwell", 'dwell = "20 ms"', 'dwell = "20 MFD"'),
    ("integration-unknown", "stage[1].integration", '"long"', '"forever"'),
    ("unknown-format", "format", "format = 1", "format = 2"),
    ("toml-syntax", "-", "format = 1", "format = = 1"),
]
REACH = [
    ("frequency", 'frequency = { from = "100 Hz", to = "1 MHz", per_decade = 5 }', '"5 MHz"'),
    ("level", 'level = "1 V"', '"3 V"'),
]


@pytest.mark.parametrize(("problem", "key", "was", "now"), SEQUENCES)
def test_a_sequence_with_something_wrong(
    refused: Callable[..., Told], files: Files, problem: str, key: str, was: str, now: str
) -> None:
    files.write("s.toml", written(SEQUENCE, was=was, now=now))
    found = refused().problems
    assert (problem, "s.toml", key) in [(one["id"], one["file"], one["key"]) for one in found]


@pytest.mark.parametrize(("key", "was", "now"), REACH)
def test_beyond_the_meter(
    refused: Callable[..., Told], files: Files, key: str, was: str, now: str
) -> None:
    files.write("s.toml", written(SEQUENCE, was=was, now=f"{key} = {now}"))
    assert any(key in one["key"] for one in refused().problems)


def test_bias_beyond_the_meter_and_reverse_on_a_polar_part(
    refused: Callable[..., Told], files: Files
) -> None:
    files.write("p.csv", HEADING + POLAR)
    open_to_all = written(
        SEQUENCE,
        was='parts = { kind = "capacitor", dielectric = ["PP", "PET", "PPS", "PEN"] }',
        now='bias = ["-1 V", "500 V"]',
    )
    files.write("s.toml", open_to_all)
    assert any("bias" in one["key"] for one in refused().problems)


@pytest.mark.parametrize(
    ("problem", "key", "was", "now"),
    [
        ("duplicate-part-id", "row 3, part_id", "HD-C2,", "HD-C1,"),
        ("unknown-position", "row 2, position", "HD-C1,1,", "HD-C1,99,"),
        ("missing-cell", "row 2, position", "HD-C1,1,", "HD-C1,,"),
        ("position-taken", "row 3, position", "HD-C2,2,", "HD-C2,1,"),
        ("unknown-kind", "row 2, kind", "1,capacitor,", "1,capacitator,"),
        ("wrong-unit-or-value", "row 2, nominal", "1 uF,", "1 MFD,"),
        ("unknown-column", "row 1", "nominal,", "nominl,"),
    ],
)
def test_a_parts_list_names_the_cell(
    refused: Callable[..., Told], files: Files, problem: str, key: str, was: str, now: str
) -> None:
    files.write("p.csv", written(FILMS, was=was, now=now))
    found = refused().problems
    assert (problem, "p.csv", key) in [(one["id"], one["file"], one["key"]) for one in found]


def test_an_ambiguous_marking_is_asked_back(refused: Callable[..., Told], files: Files) -> None:
    files.write("p.csv", HEADING + "R1,1,resistor,,±5 %,,,0.5 W,104K,,,\n")
    (problem,) = [one for one in refused().problems if one["id"] == "ambiguous-marking"]
    assert problem["key"] == "row 2, marking"
    assert "100 kΩ" in problem["expected"]
    assert "104 kΩ" in problem["expected"]


def test_an_empty_list(refused: Callable[..., Told], files: Files) -> None:
    for text in ("", "\n\n", HEADING):
        files.write("p.csv", text)
        assert "empty-list" in refused().ids()


@pytest.mark.parametrize(
    ("text", "encoding"),
    [
        (FILMS, "utf-8-sig"),
        (FILMS.replace("\n", "\r\n"), "utf-8-sig"),
        (FILMS.replace(",", ";"), "utf-8-sig"),
        (FILMS.replace(",", "\t"), "utf-16"),
        (FILMS.replace(",", ";").replace("1 uF", "1,0 uF"), "cp1252"),
    ],
)
def test_what_a_spreadsheet_saves_is_read(
    ohmward: Ohmward, files: Files, text: str, encoding: str
) -> None:
    files.write("p.csv", text.encode(encoding))
    told = ohmward("brief", *NAMES, "--json")
    assert told.code == 0, told
    assert [part["part_id"] for part in told.json["parts"]][:2] == ["HD-C1", "HD-C2"]
    assert told.json["parts"][0]["nominal"] == 1e-6


def _nothing(path: Path) -> None:
    """No file at all."""


def _png(path: Path) -> None:
    path.write_bytes(b"\x89PNG\r\n\x1a\n\0\0\0\rIHDR\0\0")


def _loop(path: Path) -> None:
    path.symlink_to(path.name)


def _junk(path: Path) -> None:
    path.write_bytes(bytes(range(256)) * 8)


def _latin(path: Path) -> None:
    path.write_bytes('name = "Prüfling"\n'.encode("latin-1"))


def _huge(path: Path) -> None:
    with path.open("wb") as file:
        file.truncate(1 << 40)  # a hole: takes no room on the disk


WRONG_FILES: list[tuple[Callable[[Path], object], set[str]]] = [
    (_nothing, {"file-missing"}),
    (Path.mkdir, {"file-unreadable"}),
    (os.mkfifo, {"file-unreadable"}),
    (_loop, {"file-unreadable"}),
    (_huge, {"file-unreadable"}),
    (_png, {"not-utf8", "not-text"}),
    (_junk, {"not-utf8", "not-text"}),
    (_latin, {"not-utf8", "missing-column"}),
    (Path.touch, {"missing-key", "empty-list"}),
]


@pytest.mark.parametrize("name", ["s.toml", "b.toml", "p.csv"])
@pytest.mark.parametrize(("make", "ids"), WRONG_FILES, ids=lambda one: getattr(one, "__name__", ""))
def test_a_wrong_file(
    refused: Callable[..., Told],
    files: Files,
    name: str,
    make: Callable[[Path], object],
    ids: set[str],
) -> None:
    (files.folder / name).unlink()
    make(files.folder / name)
    found = [one for one in refused().problems if one["file"] == name]
    assert {one["id"] for one in found} & ids


@pytest.mark.parametrize("name", ["/dev/zero", "x" * 300, "no\nwhere.toml", "", "s.toml/x.toml"])
def test_a_wrong_name(refused: Callable[..., Told], name: str) -> None:
    refused(name, "--bench", name, "--parts", name)


def test_a_name_that_leads_nowhere_says_what_there_is(refused: Callable[..., Told]) -> None:
    told = refused("film-sweap", "--bench", "b.toml", "--parts", "p.csv")
    (problem,) = told.problems
    assert problem["file"] == "film-sweap"
    assert "film-sweep" in problem["expected"]


@contextmanager
def as_nobody() -> Iterator[None]:
    """Without root's leave to read everything, if it is root who runs the tests."""
    root = os.geteuid() == 0
    if root:
        os.seteuid(65534)
    try:
        yield
    finally:
        if root:
            os.seteuid(0)


def test_without_leave_to_read(refused: Callable[..., Told], files: Files) -> None:
    ohmward_is_loaded = refused("nothing", "--bench", "b.toml", "--parts", "p.csv")
    assert ohmward_is_loaded.problems
    files.folder.chmod(0o755)
    for parent in files.folder.parents:
        if parent.name.startswith(("pytest-", "popen-")):  # pytest's own folders, no other
            parent.chmod(0o755)
    closed = files.folder / "closed"
    closed.mkdir(0)
    (files.folder / "s.toml").chmod(0)
    with as_nobody():
        told = refused("s.toml", "--bench", "closed/b.toml", "--parts", "closed/p")
    assert [one["id"] for one in told.problems] == ["file-unreadable"] * 3


def test_problems_of_all_files_come_in_one_go(refused: Callable[..., Told], files: Files) -> None:
    files.write("s.toml", written(SEQUENCE, was='level = "1 V"', now='level = "1 A"'))
    files.write("b.toml", written(BENCH, was='bias_ceiling = "40 V"', now='bias_celing = "40 V"'))
    files.write("p.csv", written(FILMS, was="HD-C2,", now="HD-C1,"))
    assert {one["file"] for one in refused().problems} == {"s.toml", "b.toml", "p.csv"}


@pytest.mark.parametrize("what", ["folder", "file", "link", "loop"])
def test_nothing_is_written_over(ohmward: Ohmward, files: Files, what: str) -> None:
    out = files.folder / "out"
    if what == "folder":
        out.mkdir()
    elif what == "file":
        out.touch()
    else:
        out.symlink_to("nowhere" if what == "link" else "out")
    before = files.listing()
    for command in ("dryrun", "run"):
        told = ohmward(command, *NAMES, "--out", "out")
        assert told.code == 2
        assert "output-exists" in told.err
    assert ohmward("demo", "--out", "out").code == 2
    assert files.listing() == before


@pytest.mark.parametrize("out", ["p.csv/out", "/proc/out", "x" * 300])
def test_a_place_where_no_folder_can_be(ohmward: Ohmward, files: Files, out: str) -> None:
    before = files.listing()
    told = ohmward("dryrun", *NAMES, "--out", out)
    assert told.code == 2
    assert "--out" in told.err
    assert files.listing() == before


def test_the_folder_is_a_problem_like_any_other(ohmward: Ohmward, files: Files) -> None:
    (files.folder / "out").mkdir()
    files.write("p.csv", written(FILMS, was="HD-C2,", now="HD-C1,"))
    told = ohmward("dryrun", *NAMES, "--out", "out")
    assert "output-exists" in told.err
    assert "duplicate-part-id" in told.err


@pytest.mark.parametrize(
    "arguments",
    [["resume", "nowhere"], ["resume", "p.csv"], ["resume", "."], ["schema", "nothing"]],
)
def test_other_commands_refuse_too(ohmward: Ohmward, files: Files, arguments: list[str]) -> None:
    before = files.listing()
    told = ohmward(*arguments)
    assert told.code == 2
    assert "one problem to mend" in told.err
    assert files.listing() == before
