"""README is true: every command in it runs, and what it shows is what they print."""

import shutil
import tomllib
from collections.abc import Iterator
from pathlib import Path

import pytest
from pydantic import BaseModel
from tests.readme import Block, Shell, blocks_of, check_installation, copy_of, differs, make_targets

from ohmward.errors import Problems
from ohmward.sequence.model import Sequence
from ohmward.setup.bench import Bench
from ohmward.setup.toml import validate

ROOT = Path(__file__).parents[1]
README = (ROOT / "README.md").read_text("utf-8")
BLOCKS = blocks_of(README)
TYPED = [block for block in BLOCKS if block.kind in ("sh", "python")]


@pytest.fixture(scope="module")
def shell(tmp_path_factory: pytest.TempPathFactory) -> Iterator[Shell]:
    """One copy of the checkout for all blocks, as one person would type them, in order."""
    folder = tmp_path_factory.mktemp("readme") / "ohmward"
    with Shell(copy_of(ROOT, folder)) as running:
        yield running
    shutil.rmtree(folder)


@pytest.mark.processes
@pytest.mark.slow
@pytest.mark.parametrize("block", TYPED, ids=lambda block: block.text.split("\n")[0])
def test_what_readme_tells_to_type(shell: Shell, block: Block) -> None:
    shell.run(block)
    if block.shown is not None:
        difference = differs(block.shown, shell.said, shell.folder)
        assert not difference, difference


def test_readme_opens_with_demo_and_test() -> None:
    first = next(block for block in BLOCKS if block.kind == "sh")
    assert first.commands == ["make demo", "make test"]
    targets = set(make_targets((ROOT / "Makefile").read_text("utf-8")))
    for block in TYPED:
        for command in block.commands:
            words = command.split()
            if words[0] == "make":
                assert set(words[1:]) <= targets


@pytest.mark.parametrize(
    "text", [block.text for block in BLOCKS if block.kind == "toml"], ids=lambda text: text[:40]
)
def test_the_toml_that_readme_shows_is_understood(text: str) -> None:
    """It may be shortened, but there is nothing in it that a file cannot have."""
    data = tomllib.loads(text)
    model: type[BaseModel] = Sequence if "stage" in data or "limit" in data else Bench
    problems = Problems()
    validate(model, data, "README.md", problems)
    assert [str(one) for one in problems if one.id != "missing-key"] == []


# The harness itself, on small texts


SMALL = """
```sh
echo one   two
# a comment
printf '%s\\n' \\
    "$PWD/run"
```
<!-- output -->
```text
one two
run
```

<!-- exits 2 -->
```sh
echo said >&2; exit 2
```

```text
said
```

Not directly after:

```text
free
```

```python
print("from python")
```
"""


def test_blocks_are_found_with_what_belongs_to_them() -> None:
    first, refused, free, script = blocks_of(SMALL)
    assert first.commands == ["echo one   two", "printf '%s\\n'      \"$PWD/run\""]
    assert first.shown == "one two\nrun\n"
    assert (refused.exits, refused.shown) == (2, "said\n")
    assert (free.kind, free.text, free.shown) == ("text", "free\n", None)
    assert (script.kind, script.shown) == ("python", None)


@pytest.mark.processes
def test_commands_run_and_their_output_is_compared(tmp_path: Path) -> None:
    first, refused, *_ = blocks_of(SMALL)
    with Shell(tmp_path) as shell:
        for block in (first, refused):
            shell.run(block)
            assert block.shown is not None
            assert differs(block.shown, shell.said, tmp_path) == ""
        assert differs("another thing\n", shell.said, tmp_path)
        with pytest.raises(AssertionError, match="exit 3"):
            shell.run(Block(kind="sh", text="exit 3\n"))
        with pytest.raises(AssertionError, match="exit 0"):
            shell.run(Block(kind="sh", text="true\n", exits=2))


@pytest.mark.parametrize(
    ("shown", "same"),
    [
        ("a b c", True),
        ("a\n…\nc", True),
        ("…\nc", True),
        ("a b\n...\n", True),
        ("a b", False),
        ("a\n…\nb", False),
        ("", False),
    ],
)
def test_a_line_of_dots_stands_for_what_is_left_out(shown: str, same: bool) -> None:
    assert (differs(shown, "a\n b  c\n", Path("/x")) == "") is same


@pytest.mark.parametrize(
    "command", ["pip install -c nowhere.txt -e .", "pip install -e '.[nothing]'"]
)
def test_an_installation_that_cannot_be_is_found(command: str) -> None:
    check_installation(".venv/bin/pip install -c constraints.txt -e '.[dev]'", ROOT)
    with pytest.raises(AssertionError):
        check_installation(command, ROOT)
