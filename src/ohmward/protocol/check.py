"""Whether a driver's codec exists and can make something of every command and reply in it."""

from collections.abc import Callable

from ohmward.errors import Problems
from ohmward.protocol.codec import Codec, codec_names, codec_of
from ohmward.setup.driver import Driver


def check_driver(driver: Driver, problems: Problems) -> Codec | None:
    """Compile all that a driver says; its codec, or None with every problem noted."""
    before = len(problems)
    try:
        codec = codec_of(driver)
    except LookupError:
        problems.add(
            id="driver-unknown-codec",
            file=driver.path,
            key="codec",
            expected=f"one of {', '.join(codec_names())}",
            found=driver.codec,
        )
        return None
    works: list[tuple[str, Callable[[], object]]] = []
    for name, setting in driver.setting.items():
        for key, text in (("set", setting.set), ("set_and_ask", setting.set_and_ask)):
            if text:
                works.append(
                    (f"setting.{name}.{key}", lambda t=text, s=setting: codec.command(t, s))  # type: ignore[misc]
                )
        works.append((f"setting.{name}.reply", lambda s=setting: codec.layout(s.layout)))  # type: ignore[misc]
    for name, reading in driver.reading.items():
        works.append((f"reading.{name}", lambda r=reading: codec.layout(r)))  # type: ignore[misc]
    for name, action in driver.action.items():
        works.append((f"action.{name}.send", lambda a=action: codec.command(a.send)))  # type: ignore[misc]
        if action.reply is not None:
            works.append((f"action.{name}.reply", lambda a=action: codec.layout(a.reply)))  # type: ignore[misc]
    for key, work in works:
        try:
            work()
        except (ValueError, LookupError, TypeError) as error:
            problems.add(
                id="driver-codec-refuses",
                file=driver.path,
                key=key,
                expected=f"something that the codec {driver.codec} can do",
                found=str(error),
            )
    return codec if len(problems) == before else None
