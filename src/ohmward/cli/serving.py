"""``serve``: a simulated bench behind sockets, HiSLIP and terminals of this machine."""

from typing import Annotated

import typer


def add_to(app: typer.Typer) -> None:
    """Add this command to the program."""
    app.command()(serve)


def serve(
    bench: Annotated[
        str, typer.Argument(metavar="BENCH", help="Bench file, or the name of a shipped one.")
    ],
    parts: Annotated[
        str | None,
        typer.Option("--parts", metavar="PARTS", help="Parts list: what lies in the positions."),
    ] = None,
    seed: Annotated[int, typer.Option("--seed", min=0, help="Draws parts and noise.")] = 0,
    port: Annotated[
        list[str] | None,
        typer.Option(
            "--port",
            metavar="NAME=NUMBER",
            help="TCP port of an instrument; may be given for each. Any free one otherwise.",
        ),
    ] = None,
    link: Annotated[
        list[str] | None,
        typer.Option(
            "--link",
            metavar="NAME=LINK",
            help="What an instrument is served on: socket, hislip or serial; may be given for "
            "each. As its address in the bench file says otherwise.",
        ),
    ] = None,
    json: Annotated[
        bool, typer.Option("--json", help="Print the instruments as JSON, one line.")
    ] = False,
) -> None:
    """Serve a simulated bench on this machine until stopped; prints the bench file for run."""
    from ohmward import api

    ports = dict(_port(text) for text in port or ())
    links = dict(_link(text) for text in link or ())
    api.serve(bench, parts=parts, seed=seed, as_json_line=json, ports=ports, links=links)


def _link(text: str) -> tuple[str, str]:
    """An instrument's name and the link that it is to be served on."""
    name, _, link = text.partition("=")
    if not name or not link:
        raise typer.BadParameter(f"{text!r} is not NAME=LINK", param_hint="--link")
    return name, link


def _port(text: str) -> tuple[str, int]:
    """An instrument's name and its TCP port."""
    name, _, number = text.partition("=")
    if not name or not number.isascii() or not number.isdigit() or not 0 < int(number) < 65536:
        raise typer.BadParameter(
            f"{text!r} is not NAME=NUMBER with a TCP port", param_hint="--port"
        )
    return name, int(number)
