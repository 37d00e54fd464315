"""The record's rows, one struct per table: what the session core says happened.

Times are integer nanoseconds on the session clock (the unwrapped box clock). Each class names its
table and primary key; :mod:`rigctl.record.sqlite` derives the SQL from the annotations, and replay
compares these rows with the stored ones field by field.
"""

from __future__ import annotations

from typing import ClassVar, Literal

from msgspec import Struct

TriggerFate = Literal["fired", "dropped_late", "refused", "cancelled", "unknown"]
PairFate = Literal["on_target", "off_target", "doublet", "no_post", "no_pre", "unknown", "not_run"]
# From best to worst: a pairing's fate is its worst spike pair's.
PAIR_FATES: tuple[PairFate, ...] = (
    "on_target",
    "off_target",
    "doublet",
    "no_post",
    "no_pre",
    "unknown",
    "not_run",
)


class Row(Struct, frozen=True):
    """Base of all rows."""

    TABLE: ClassVar[str] = ""
    KEY: ClassVar[tuple[str, ...]] = ()


class TriggerRow(Row, frozen=True):
    """One pulse. Written when its fate is known; a later journal entry may replace the row."""

    TABLE: ClassVar[str] = "trigger"
    KEY: ClassVar[tuple[str, ...]] = ("id",)
    id: int
    line: str
    phase: int
    pairing: int | None
    planned_ns: int
    planned_tick: int | None
    width_ns: int
    fired_ns: int | None
    observed_ns: int | None
    bound_ns: int | None
    boot: int
    fate: TriggerFate


class SpikeRow(Row, frozen=True):
    """One reference event: a delivered pre event or a detected post spike."""

    TABLE: ClassVar[str] = "spike"
    KEY: ClassVar[tuple[str, ...]] = ("id",)
    id: int
    line: str
    cell: str | None
    pathway: str | None
    at_ns: int
    bound_ns: int
    side: Literal["pre", "post"]
    source: Literal["detector", "host", "derived"]
    reference: str
    pairing: int | None


class PairingRow(Row, frozen=True):
    """One pairing, judged."""

    TABLE: ClassVar[str] = "pairing"
    KEY: ClassVar[tuple[str, ...]] = ("id",)
    id: int
    phase: int
    pathway: str
    target_dt_ns: int | None
    delivered_dt_ns: int | None
    fate: PairFate
    replaces: int | None


class SpikePairRow(Row, frozen=True):
    """One intended Δt inside a pairing, judged."""

    TABLE: ClassVar[str] = "spike_pair"
    KEY: ClassVar[tuple[str, ...]] = ("pairing", "k")
    pairing: int
    k: int
    pre_spike: int | None
    post_spike: int | None
    target_dt_ns: int
    delivered_dt_ns: int | None
    fate: PairFate


class ForecastRow(Row, frozen=True):
    """The predicted relative change so far (0.1 is +10 %) of one pathway by one rule."""

    TABLE: ClassVar[str] = "forecast"
    KEY: ClassVar[tuple[str, ...]] = ("at_ns", "pathway", "rule", "parameter_set")
    at_ns: int
    pathway: str
    rule: str
    parameter_set: str
    change: float
    low: float
    high: float


class MeasureRow(Row, frozen=True):
    """One number measured from a sweep."""

    TABLE: ClassVar[str] = "measure"
    KEY: ClassVar[tuple[str, ...]] = ("at_ns", "cell", "pathway", "access", "kind")
    at_ns: int
    cell: str | None
    pathway: str | None
    access: int
    clamp: str | None
    kind: str
    value: float
    unit: str


class SweepRow(Row, frozen=True):
    """One stretch of recorded samples; ``samples`` are little-endian int16, value = sample·scale.

    ``at_ns`` is the time of the first sample.
    """

    TABLE: ClassVar[str] = "sweep"
    KEY: ClassVar[tuple[str, ...]] = ("at_ns",)
    at_ns: int
    cell: str | None
    clamp: str | None
    rate_hz: float
    unit: str
    scale: float
    samples: bytes
    sha256: str


class SyncRow(Row, frozen=True):
    """One clock exchange: host time = session time + offset, within ± bound."""

    TABLE: ClassVar[str] = "sync"
    KEY: ClassVar[tuple[str, ...]] = ("at_ns",)
    at_ns: int
    offset_ns: int
    bound_ns: int
    skew_ppm: float
    round_trip_ns: int


class EventRow(Row, frozen=True):
    """One input or decision of the session core. ``chain`` is the running SHA-256 (hex)."""

    TABLE: ClassVar[str] = "event"
    KEY: ClassVar[tuple[str, ...]] = ("seq",)
    seq: int
    at_ns: int
    kind: str
    body: str
    chain: str


class HeaderRow(Row, frozen=True):
    """One key of the header; event 0 repeats the whole header."""

    TABLE: ClassVar[str] = "header"
    KEY: ClassVar[tuple[str, ...]] = ("key",)
    key: str
    value: str


TABLES: tuple[type[Row], ...] = (
    HeaderRow,
    TriggerRow,
    SpikeRow,
    PairingRow,
    SpikePairRow,
    ForecastRow,
    MeasureRow,
    SweepRow,
    SyncRow,
    EventRow,
)
