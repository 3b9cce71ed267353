"""Serves a simulated bench on this machine, for ``run`` and for anybody's PyVISA scripts."""

import json
import sys
from collections.abc import Mapping
from functools import partial

import trio

from ohmward.api.simulation import build_bench
from ohmward.errors import OhmwardError, Problems
from ohmward.protocol.check import check_driver
from ohmward.run.stopping import catch_signals
from ohmward.setup.address import read_address
from ohmward.setup.bench import Bench, load_bench
from ohmward.setup.bench_drivers import load_drivers
from ohmward.setup.driver import Driver
from ohmward.setup.parts import load_parts
from ohmward.setup.resources import find_file
from ohmward.sim.server import LINKS
from ohmward.sim.server import serve as serve_devices


def serve(
    bench: str,
    *,
    parts: str | None,
    seed: int,
    as_json_line: bool,
    ports: Mapping[str, int] | None = None,
    links: Mapping[str, str] | None = None,
) -> None:
    """Serve the bench until stopped; prints, once all listens, where each instrument is.

    As TOML this is the bench file that ``run`` needs; as JSON one line with each instrument's
    address, role, link and whether it speaks SCPI. ``ports`` gives TCP ports by the instrument's
    name; the others get any free one. ``links`` says by name what it is served on: ``socket``,
    ``hislip`` or ``serial`` (a pseudo-terminal); the others are on what their bench's address
    names. Raises BadInput with every problem, Stopped after a signal.
    """
    problems = Problems()
    loaded = load_bench(find_file(bench, "simulators"), problems)
    drivers = load_drivers(loaded, problems) if loaded else None
    for driver in (drivers or {}).values():
        check_driver(driver, problems)
    rows = load_parts(find_file(parts, "simulators", ".csv"), loaded, problems) if parts else ()
    _check_ports(ports or {}, links or {}, loaded, problems)
    problems.raise_if_any()
    if loaded is None or drivers is None:
        raise OhmwardError(f"{bench} was refused without a problem that says why")
    simulated = build_bench(loaded, drivers, rows, seed=seed)
    served_on = links_of(loaded, links or {})

    def ready(addresses: dict[str, str]) -> None:
        text = (
            json.dumps(_as_json(loaded, drivers, addresses, served_on))
            if as_json_line
            else bench_file(loaded, drivers, addresses)
        )
        sys.stdout.write(text + "\n")
        sys.stdout.flush()

    with catch_signals() as stop:
        try:
            work = partial(serve_devices, simulated, ports=ports, ready=ready, links=served_on)
            trio.run(stop.run, work)
        except* OSError as group:
            reasons = "; ".join(sorted({str(error) for error in group.exceptions}))
            raise OhmwardError(f"the bench cannot be served: {reasons}") from group


def links_of(bench: Bench, asked: Mapping[str, str]) -> dict[str, str]:
    """The link that each instrument is served on: the one asked for, else as its address says.

    Instruments that share an address share a link. What this machine cannot serve (VXI-11, USB,
    GPIB) is served on a socket.
    """
    by_address: dict[str, str] = {}
    for name, one in bench.instruments.items():
        kind = read_address(one.address).kind
        by_address.setdefault(one.address, kind if kind in LINKS else "socket")
        if name in asked:
            by_address[one.address] = asked[name]
    return {name: by_address[one.address] for name, one in bench.instruments.items()}


def _check_ports(
    ports: Mapping[str, int],
    links: Mapping[str, str],
    bench: Bench | None,
    problems: Problems,
) -> None:
    known = sorted(bench.instruments) if bench is not None else sorted({*ports, *links})
    for key, names in (("--port", ports), ("--link", links)):
        for name in sorted(set(names) - set(known)):
            problems.add(
                id="unknown-instrument",
                file="command line",
                key=key,
                expected=f"an instrument of the bench: {', '.join(known)}",
                found=name,
            )
    for name, link in sorted(links.items()):
        if link not in LINKS:
            problems.add(
                id="unknown-link",
                file="command line",
                key=f"--link {name}",
                expected=f"one of {', '.join(LINKS)}",
                found=link,
            )
        elif link == "serial" and name in ports:
            problems.add(
                id="port-of-a-terminal",
                file="command line",
                key=f"--port {name}",
                expected="no TCP port for an instrument that is served on a terminal",
                found=ports[name],
            )


def _as_json(
    bench: Bench,
    drivers: dict[str, Driver],
    addresses: dict[str, str],
    links: Mapping[str, str],
) -> dict[str, object]:
    return {
        name: {
            "address": addresses[name],
            "role": one.role.value,
            "link": links[name],
            "scpi": drivers[name].codec == "scpi",
        }
        for name, one in bench.instruments.items()
    }


def bench_file(bench: Bench, drivers: dict[str, Driver], addresses: dict[str, str]) -> str:
    """The bench file of a served bench, as TOML: the same bench at the served addresses."""
    lines = ["format = 1", f"name = {json.dumps(bench.name)}"]
    for key, value in (
        ("bias_ceiling", bench.bias_ceiling_v),
        ("bias_current_ceiling", bench.bias_current_ceiling_a),
        ("level_ceiling", bench.level_ceiling_v),
    ):
        if value is not None:
            lines.append(f'{key} = "{value!r} {"A" if "current" in key else "V"}"')
    for name, one in bench.instruments.items():
        driver = one.driver if "/" not in one.driver else str(drivers[name].path.absolute())
        if driver.endswith(".toml"):
            driver = str(drivers[name].path.absolute())
        lines += [
            "",
            f"[instrument.{name}]",
            f"role = {json.dumps(one.role.value)}",
            f"driver = {json.dumps(driver)}",
            f"address = {json.dumps(addresses[name])}",
            f'cable = "{one.cable_m!r} m"',
        ]
        if one.serial_number:
            lines.append(f"serial_number = {json.dumps(one.serial_number)}")
    lines += ["", "[fixture]", f"loading = {json.dumps(bench.fixture.loading)}"]
    lines.append(f"name = {json.dumps(bench.fixture.name)}")
    for place in bench.positions:
        lines += ["", "[[position]]", f"name = {json.dumps(place.name)}"]
        if place.meter_channels:
            lines.append(f"meter_channels = {json.dumps(list(place.meter_channels))}")
    return "\n".join(lines)
