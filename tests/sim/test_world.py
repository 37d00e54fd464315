"""The world: waiting, order, faults; through the backend that the program uses."""

from __future__ import annotations

import subprocess
import sys

import pytest

from rigctl.backends import load
from rigctl.backends.base import Connection, OpenOptions
from rigctl.errors import InputError, LinkError
from rigctl.link import messages as msg
from rigctl.link.frames import FrameReader, encode_frame
from rigctl.timing.clock import VirtualClock
from rigctl_sim import backend, faults
from rigctl_sim.backend import SimBackend
from rigctl_sim.knobs import knobs_of
from tests.conftest import make_plan, make_rig

S = 1_000_000_000
PING = encode_frame(msg.encode(msg.Ping(7)))


def _open(extra: str = "", seed: int = 1, spec: str = "") -> Connection:
    rig = make_rig(extra)
    return load("sim").open(rig, make_plan(rig=rig), OpenOptions(seed, spec))


def test_waiting_returns_at_the_time_asked_for_and_not_before() -> None:
    connection = _open()
    connection.link.wait(S)  # the boot notice
    assert connection.link.wait(5 * S) == b""
    assert connection.clock.now_ns() == 5 * S


def test_bytes_take_their_time_there_and_back() -> None:
    connection = _open("\n[sim.wire]\nus_per_byte = 20\ndelay_min_us = 200\ndelay_spread_us = 0\n")
    connection.link.wait(S)
    connection.link.wait(2 * S)
    connection.link.write(PING)
    data = connection.link.wait(3 * S)
    (pong,) = [msg.decode(p) for p in FrameReader().feed(data)]
    assert isinstance(pong, msg.Pong)
    # 0.2 ms of bridge and 20 µs a byte, each way.
    there_and_back_ns = 2 * 200_000 + 20_000 * (len(PING) + len(data))
    assert connection.clock.now_ns() == 2 * S + there_and_back_ns


def test_the_same_seed_gives_the_same_bytes() -> None:
    def heard(seed: int) -> list[tuple[int, bytes]]:
        connection = _open(seed=seed)
        out = []
        for n in range(1, 20):
            connection.link.write(PING)
            out.append((connection.clock.now_ns(), connection.link.wait(n * S)))
            connection.link.wait(n * S)
        return out

    assert heard(1) == heard(1)
    assert heard(1) != heard(2)


def test_a_pulled_cable_raises_from_then_on() -> None:
    connection = _open(spec="cable_pull_at_s=2")
    connection.link.wait(S)
    connection.link.wait(S)
    with pytest.raises(LinkError, match="gone"):
        connection.link.wait(3 * S)
    with pytest.raises(LinkError, match="gone"):
        connection.link.write(PING)


@pytest.mark.parametrize(
    ("text", "sentence"),
    [
        ("creep_ms=3,,misses=2", None),
        ("creep=3", 'creep: there is no such fault; did you mean "creep_ms"?'),
        ("misses=1.5", "a whole number from 0 to 1e+06 (count) is needed after misses=."),
        ("misses", "a whole number"),
        ("ppm=nan", "a number from -5000 to 5000 (ppm)"),
        ("zzz=1", "known: creep_ms, misses"),
    ],
)
def test_fault_specifications(text: str, sentence: str | None) -> None:
    if sentence is None:
        assert faults.parse(text).misses == 2
        return
    with pytest.raises(InputError) as caught:
        faults.parse(text)
    assert sentence in str(caught.value)


def test_every_fault_is_described_with_its_unit() -> None:
    described = {key for key, unit, what in load("sim").describe_faults() if unit and what}
    assert described == set(faults.Faults.__struct_fields__)


def test_faults_of_the_scripted_cell_are_refused_for_the_other() -> None:
    with pytest.raises(InputError, match="only the scripted cell can be told that"):
        _open('\n[sim]\ncell = "conductance"\n', spec="creep_ms=1")


@pytest.mark.parametrize(
    ("options", "sentence"),
    [
        ({"cel": "scripted"}, 'did you mean "cell"'),
        ({"scripted": {"creep_mss": 1}}, 'did you mean "creep_ms"'),
        ({"scripted": {"creep_ms": 100}}, "<= 20"),
        ({"cell": "other"}, "Invalid enum value"),
        ({"scripted": {"miss_at": [0]}}, "scripted.miss_at"),
        ({"clock": {"ppm": float("nan")}}, "clock.ppm"),
    ],
)
def test_wrong_knobs_get_a_sentence(options: dict[str, object], sentence: str) -> None:
    with pytest.raises(InputError) as caught:
        knobs_of(options)
    assert sentence in str(caught.value)


def test_every_knob_is_described() -> None:
    schema = SimBackend().knobs_schema()
    tables = schema["$defs"]
    assert len(tables) == 7
    for table in tables.values():
        for knob in table["properties"].values():
            alternatives = [knob, *knob.get("anyOf", [])]
            assert any("description" in a or "$ref" in str(a) for a in alternatives), knob


def test_at_the_pace_of_the_wall_clock_the_bytes_are_the_same(
    monkeypatch: pytest.MonkeyPatch,
) -> None:
    wall = VirtualClock(77 * S)
    monkeypatch.setattr(backend, "MonotonicClock", lambda: wall)
    rig = make_rig()
    plan = make_plan(rig=rig)
    paced = SimBackend().open(rig, plan, OpenOptions(1, "", real_time=True))
    free = SimBackend().open(rig, plan, OpenOptions(1, ""))
    for n in range(1, 8):
        for connection in (paced, free):
            connection.link.write(PING)
        assert paced.link.wait(n * S) == free.link.wait(n * S)
        assert paced.clock.now_ns() == free.clock.now_ns()
        # The wall has caught up with the virtual clock, and no more than that.
        assert wall.now_ns() == 77 * S + paced.clock.now_ns()


def test_a_synapse_of_no_pathway_is_refused() -> None:
    with pytest.raises(InputError, match=r"synapse\.s9: no such pathway"):
        _open("\n[sim.synapse.s9]\nsites = 3\n")


def test_the_scripted_rig_needs_no_compiler() -> None:
    code = "import rigctl_sim.backend, sys; print('numba' in sys.modules)"
    out = subprocess.run([sys.executable, "-c", code], capture_output=True, text=True).stdout
    assert out.strip() == "False"
