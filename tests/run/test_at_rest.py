"""No relay moves and no part is connected while the meter's bias of earlier work is on."""

import os
import pty
from pathlib import Path

import pytest
from tests.run.program import Program
from tests.run.workbench import HAND_BENCH, Served, Workbench, sequence, table

from ohmward.sim.device import Device

pytestmark = [pytest.mark.processes, pytest.mark.slow]


def heard(name: str, device: Device, log: list[tuple[str, str]]) -> None:
    receive = device.receive

    def hear(data: bytes, now_s: float) -> None:
        log.extend((name, line) for line in data.decode("ascii").splitlines())
        receive(data, now_s)

    device.receive = hear  # type: ignore[method-assign]


def test_a_bias_that_is_found_on_is_off_before_a_relay_moves(tmp_path: Path) -> None:
    workbench = Workbench(tmp_path)
    workbench.write("sequence.toml", sequence('bias = ["5 V", "0 V"]', repeats="1"))
    log: list[tuple[str, str]] = []
    with Served(workbench) as served:
        served.switch_on("VOLT:OFFS 40", "VOLT:OFFS:STAT ON")
        for name in ("meter", "switch"):
            heard(name, served.simulated.named[name], log)
        workbench.run()
        assert served.at_rest()
    bias_on = True
    for name, line in log:
        if name == "meter" and line.startswith("VOLT:OFFS:STAT "):
            bias_on = line.endswith("ON")
        elif name == "switch" and line.startswith(("ROUT:CLOS (", "ROUT:CLOS:", "ROUT:OPEN")):
            assert not bias_on or line.endswith("?")
    assert ("switch", "ROUT:CLOS (@101,201)") in log


def test_a_person_at_a_terminal_is_asked_for_each_part(tmp_path: Path, program: Program) -> None:
    workbench = Workbench(tmp_path)
    workbench.write("bench.toml", HAND_BENCH)
    lot = (tmp_path / "parts.csv").read_text("utf-8")
    for position in "123":
        lot = lot.replace(f",{position},capacitor", ",clips,capacitor")
    workbench.write("parts.csv", lot)
    workbench.write("sequence.toml", sequence(repeats="1"))
    ours, theirs = pty.openpty()
    out = tmp_path / "out"
    try:
        with Served(workbench) as served:
            running = program.start("run", *workbench.arguments(out), stdin=os.ttyname(theirs))
            for part_id in ("C1", "C2", "C3"):
                running.until(lambda asked=part_id: f"Discharge {asked}," in running.said)  # type: ignore[misc]
                served.simulated.place(part_id, "clips")
                os.write(ours, b"\n")
            ended = running.wait()
    finally:
        os.close(ours)
        os.close(theirs)
    assert ended.code == 0, ended.err
    assert {row["status"] for row in table(out, "impedance")} == {"ok"}
    judged = [row["decision"] for row in table(out, "results") if row["limit_min"]]
    assert judged == ["accept", "accept", "reject"]


def test_nobody_at_a_terminal(tmp_path: Path, program: Program) -> None:
    workbench = Workbench(tmp_path)
    workbench.write("bench.toml", HAND_BENCH)
    lines = (tmp_path / "parts.csv").read_text("utf-8").replace(",1,", ",clips,").splitlines()
    workbench.write("parts.csv", "\n".join(lines[:2]) + "\n")
    ended = program.start("run", *workbench.arguments(tmp_path / "out", "bench.toml")).wait()
    assert ended.code == 2
    assert "a terminal at which a person is asked" in ended.err
