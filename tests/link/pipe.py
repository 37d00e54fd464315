"""A host and a box joined by a byte pipe that tests can damage; time moves only when told."""

from __future__ import annotations

from collections.abc import Callable, Sequence

from rigctl.box import Box, BoxConfig, Edge
from rigctl.link import host as link
from rigctl.session.actions import ScheduledTrigger

TICK_NS = 500
LIMITS = {
    "min_width_ns": 30_000,
    "max_width_ns": 400_000_000,
    "min_spacing_ns": 100_000,
    "max_pulses_per_s": 500,
    "max_duty_permille": 500,
    "max_pulses": 100_000,
}
HASH = "ab" * 32
Damage = Callable[[bytes], bytes]


def same(data: bytes) -> bytes:
    """Damage nothing."""
    return data


class Pipe:
    """Host and box under one clock of nanoseconds; bytes arrive within the same step."""

    def __init__(
        self,
        config: BoxConfig | None = None,
        to_box: Damage = same,
        to_host: Damage = same,
        start_tick: int = 0,
    ) -> None:
        self.config = config or BoxConfig(("pre1", "post1"), ("spike1",))
        self.box = Box(self.config)
        self.host = link.HostLink()
        self.now_ns = start_tick * TICK_NS
        self.events: list[link.LinkEvent] = []
        self.edges: list[Edge] = []
        self.to_box, self.to_host = to_box, to_host

    @property
    def tick(self) -> int:
        """The box's tick now."""
        return self.now_ns // TICK_NS

    def exchange(self) -> None:
        """Let bytes flow both ways once."""
        self.edges += self.box.advance(self.tick)
        out = self.host.take_output()
        if out:
            self.box.receive(self.to_box(out), self.tick)
            self.edges += self.box.advance(self.tick)
        back = self.box.take_output()
        if back:
            self.events += self.host.feed(self.to_host(back), self.now_ns)

    def run(self, ms: float, step_ms: float = 1.0, alive: bool = True) -> None:
        """Let time pass in steps; the host keeps the box alive every 100 ms."""
        end_ns = self.now_ns + round(ms * 1e6)
        while self.now_ns < end_ns:
            self.now_ns = min(end_ns, self.now_ns + round(step_ms * 1e6))
            self.events += self.host.tick(self.now_ns)
            if alive and self.now_ns - self.host.last_sent_ns >= 100_000_000:
                self.host.keep_alive(self.now_ns)
            self.exchange()

    def arm(self) -> None:
        """Say hello and arm."""
        self.host.hello(self.now_ns)
        self.run(500)
        self.host.arm_request(self.now_ns, HASH, 3_600_000, LIMITS)
        self.run(500)
        assert self.host.armed

    def upload(self, ticks: Sequence[int], line: str = "pre1", width: int = 200) -> None:
        """Upload triggers at ticks, numbered from 1."""
        self.host.upload(
            self.now_ns,
            [ScheduledTrigger(n, line, t, width) for n, t in enumerate(ticks, 1)],
        )

    def of(self, kind: type[link.LinkEvent]) -> list[link.LinkEvent]:
        """Return the events of a kind."""
        return [e for e in self.events if isinstance(e, kind)]

    def journal(self, kind: str) -> list[link.Journal]:
        """Return the journal entries of a kind."""
        return [e for e in self.events if isinstance(e, link.Journal) and e.kind == kind]
