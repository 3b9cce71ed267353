"""The report: one file without a network, whole without eyes or colour, safe to open."""

import html.parser
import re
import shutil
from collections import Counter
from pathlib import Path

import pytest

from ohmward import api
from ohmward.output.record import RunUnreadable


class Page(html.parser.HTMLParser):
    """Collects what the checks below ask for."""

    def __init__(self, text: str) -> None:
        super().__init__()
        self.tags: Counter[str] = Counter()
        self.ids: Counter[str] = Counter()
        self.links: list[str] = []
        self.headings: list[int] = []
        self.text: list[str] = []
        self.feed(text)

    def handle_starttag(self, tag: str, attrs: list[tuple[str, str | None]]) -> None:
        self.tags[tag] += 1
        if re.fullmatch(r"h[1-6]", tag):
            self.headings.append(int(tag[1]))
        for name, value in attrs:
            if name == "id":
                self.ids[str(value)] += 1
            if name in ("href", "src", "xlink:href"):
                self.links.append(str(value))

    def handle_data(self, data: str) -> None:
        self.text.append(data)


@pytest.fixture(scope="module")
def run(tmp_path_factory: pytest.TempPathFactory) -> Path:
    folder = tmp_path_factory.mktemp("report")
    prepared = api.prepare("film-sweep", bench="depot-bench", parts="depot-lot")
    api.dry_run(prepared, out=folder / "run", seed=1)
    api.write_report(folder / "run")
    return folder / "run"


def test_it_needs_no_network_and_runs_nothing(run: Path) -> None:
    text = (run / "report.html").read_text("utf-8")
    page = Page(text)
    assert all(link.startswith(("#", "data:")) for link in page.links), page.links
    assert not page.tags["script"]
    assert not re.search(r"url\((?!#)", text)


def test_ids_are_unique_and_headings_skip_no_level(run: Path) -> None:
    page = Page((run / "report.html").read_text("utf-8"))
    assert [name for name, count in page.ids.items() if count > 1] == []
    assert page.headings[0] == 1
    pairs = zip(page.headings, page.headings[1:], strict=False)
    assert all(after - before <= 1 for before, after in pairs)


def test_every_part_and_figure_is_told_in_words(run: Path) -> None:
    text = (run / "report.html").read_text("utf-8")
    page = Page(text)
    said = " ".join(page.text)
    for part_id in ("HD-C1", "HD-C2", "HD-C3", "HD-C4", "RD-C1"):
        assert part_id in said
    assert page.tags["svg"] == len(re.findall(r'<svg[^>]* role="img"[^>]* aria-labelledby=', text))
    assert page.tags["svg"] == page.tags["title"] - 1  # the page has one of its own
    assert page.tags["table"] == page.tags["caption"]
    assert "dry run on a simulated bench" in said


def test_the_same_run_gives_the_same_bytes(run: Path) -> None:
    first = (run / "report.html").read_bytes()
    api.write_report(run)
    assert (run / "report.html").read_bytes() == first


def test_names_cannot_break_out_of_the_page(tmp_path: Path) -> None:
    lot = tmp_path / "lot.csv"
    lot.write_text(
        "part_id,position,kind,nominal,tolerance,rated_voltage,marking,dielectric\n"
        '"<script>alert(1)</script>",1,capacitor,10 nF,±5 %,160 V DC,10nJ,PP\n',
        "utf-8",
    )
    prepared = api.prepare("film-sweep", bench="depot-bench", parts=lot)
    api.dry_run(prepared, out=tmp_path / "run")
    text = api.write_report(tmp_path / "run").read_text("utf-8")
    assert "<script" not in text
    assert "&lt;script&gt;" in text


def test_a_folder_that_is_no_whole_run_is_named(run: Path, tmp_path: Path) -> None:
    broken = tmp_path / "run"
    shutil.copytree(run, broken)
    (broken / "report.html").unlink()
    (broken / "results.csv").unlink()
    with pytest.raises(RunUnreadable, match=r"results\.csv"):
        api.write_report(broken)
    assert not (broken / "report.html").exists()
