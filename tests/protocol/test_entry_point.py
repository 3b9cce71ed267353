"""A package of other people's making adds a codec under the entry point group."""

import subprocess
import sys
import zipfile
from pathlib import Path

import pytest

from ohmward.errors import Problems
from ohmward.protocol.codec import codec_names, codec_of
from ohmward.setup.driver import Driver, load_driver

MODULE = '''
from ohmward.protocol.text import ScpiCodec


class Shouting(ScpiCodec):
    """SCPI for an instrument that is hard of hearing."""

    def layout(self, reply):
        inner = super().layout(reply)
        return inner._replace(decode=lambda message: inner.decode(message.rstrip(b"!")))
'''


WHEEL = {
    "shouting_codec.py": MODULE,
    "shouting_codec-1.0.dist-info/METADATA": (
        "Metadata-Version: 2.1\nName: shouting-codec\nVersion: 1.0\n"
    ),
    "shouting_codec-1.0.dist-info/WHEEL": (
        "Wheel-Version: 1.0\nGenerator: by-hand\nRoot-Is-Purelib: true\nTag: py3-none-any\n"
    ),
    "shouting_codec-1.0.dist-info/entry_points.txt": (
        "[ohmward.codecs]\nshouting = shouting_codec:Shouting\n"
    ),
    "shouting_codec-1.0.dist-info/RECORD": "",
}


@pytest.fixture
def installed(tmp_path: Path, monkeypatch: pytest.MonkeyPatch) -> str:
    """The package, installed by pip from a wheel into a folder that Python looks into."""
    wheel = tmp_path / "shouting_codec-1.0-py3-none-any.whl"
    with zipfile.ZipFile(wheel, "w") as archive:
        for name, text in WHEEL.items():
            archive.writestr(name, text)
    site = tmp_path / "site"
    pip = [sys.executable, "-m", "pip", "install", "--quiet", "--no-index", "--no-deps"]
    quiet = ["--disable-pip-version-check", "--target", str(site), str(wheel)]
    subprocess.run([*pip, *quiet], check=True, capture_output=True, timeout=120)
    monkeypatch.syspath_prepend(site)
    monkeypatch.delitem(sys.modules, "shouting_codec", raising=False)
    return "shouting"


def own_driver(folder: Path, codec: str) -> tuple[Driver | None, Problems]:
    (folder / "own.toml").write_text(
        f'format = 1\nextends = "scpi-thermometer"\ncodec = "{codec}"\n', encoding="utf-8"
    )
    problems = Problems()
    return load_driver("own.toml", folder, problems), problems


@pytest.mark.processes
@pytest.mark.slow
def test_a_package_adds_a_codec(tmp_path: Path, installed: str) -> None:
    assert installed in codec_names()
    driver, problems = own_driver(tmp_path, installed)
    assert driver is not None, list(problems)
    codec = codec_of(driver)
    layout = codec.layout(driver.reading["temperature"])
    assert layout.decode(b"+2.315000E+01!!").values == {"temperature": 23.15}


def test_a_codec_that_nobody_has(tmp_path: Path) -> None:
    driver, _ = own_driver(tmp_path, "whispering")
    assert driver is not None
    with pytest.raises(LookupError, match="whispering"):
        codec_of(driver)
