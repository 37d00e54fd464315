"""A pathway driven by light: its presynaptic spikes are detected, its EPSPs follow them."""

from __future__ import annotations

import re
from pathlib import Path

import numpy as np
import pytest

from rigctl.record.read import open_record
from rigctl.record.verify import verify
from tests.conftest import EXAMPLES, SHORT, rehearsed

RIG = (EXAMPLES / "rigs/light.toml").read_text(encoding="utf-8")
# One pathway only, and Δt from the presynaptic spike.
PROTOCOL = re.sub(r'\[\[phase\.test\]\]\npathway = "s2"\n.*\n.*\n', "", SHORT)
PROTOCOL = PROTOCOL.replace(
    "[[forecast]]", '[reference]\npre = "presynaptic_spike"\n\n[[forecast]]'
)
PROTOCOL = PROTOCOL.replace("[[forecast]]", "[judging]\non_target_within_ms = 5\n\n[[forecast]]")
QUIET = "\n[sim.scripted]\nnoise_mv = 0\nartefact_mv = 0\n[sim.synapse.s1]\nsites = 5000\n"


def test_presynaptic_spikes_are_detected_and_delta_t_is_taken_from_them(tmp_path: Path) -> None:
    ended = rehearsed(tmp_path, PROTOCOL, RIG)
    assert ended.how == "as_planned"
    assert verify(ended.record).ok
    with open_record(ended.record) as record:
        fired = np.array(
            [t.fired_ns for t in record.triggers if t.line == "led1" and t.fired_ns is not None]
        )
        pres = [s for s in record.spikes if s.side == "pre"]
        assert {(s.source, s.line) for s in pres} == {("detector", "prespike1")}
        assert len(pres) == len(fired)
        latency_ms = (np.array(sorted(s.at_ns for s in pres)) - np.sort(fired)) / 1e6
        # The rig file says 4.80 ± 0.60 ms; five standard errors of the mean, and a broad SD.
        assert latency_ms.mean() == pytest.approx(4.8, abs=5 * 0.6 / np.sqrt(len(pres)))
        assert 0.25 < latency_ms.std(ddof=1) < 1.2
        posts = {s.pairing: s.at_ns for s in record.spikes if s.side == "post"}
        for pre in pres:
            if pre.pairing is not None:
                (pairing,) = (p for p in record.pairings if p.id == pre.pairing)
                assert pairing.delivered_dt_ns == posts[pre.pairing] - pre.at_ns


def test_the_epsp_follows_its_spike_by_what_is_left_of_the_latency(tmp_path: Path) -> None:
    ended = rehearsed(tmp_path, PROTOCOL, RIG + QUIET)
    with open_record(ended.record) as record:
        pres = sorted(s.at_ns for s in record.spikes if s.side == "pre" and s.pairing is None)
        sweeps = list(record.sweeps(0, 10**15))
        delays_ms = []
        for at_ns in pres:
            (sweep,) = (
                s for s in sweeps if 0 <= at_ns - s.at_ns < len(s.samples) / 2 / s.rate_hz * 1e9
            )
            trace = np.frombuffer(sweep.samples, "<i2") * sweep.scale
            onset = int(np.flatnonzero(trace > -69.9)[0])
            delays_ms.append(onset / sweep.rate_hz * 1e3 - (at_ns - sweep.at_ns) / 1e6)
    # 6.40 − 4.80 ms; at 10 kHz the rise shows in the first or second sample.
    assert len(delays_ms) > 10
    assert min(delays_ms) > 1.5
    assert max(delays_ms) < 1.9
