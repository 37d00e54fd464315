"""Rules on spikes recorded elsewhere."""

from __future__ import annotations

import pytest

from rigctl.errors import InputError
from rigctl.plasticity.predict import as_json, as_text, predict

CSV = "at_ms,side\n1000,pre\n1010,post\n"


def test_seconds_and_milliseconds_any_order() -> None:
    first = predict(CSV, "s.csv", rule="pair-all", set_name="bi-poo-2001")
    second = predict(
        "side,at_s,note\npost,1.010,x\npre,1.000,y\n\n", "s.csv", rule="pair-all",
        set_name="bi-poo-2001",
    )  # fmt: skip
    assert first.change == second.change
    assert (first.pre, first.post) == (1, 1)
    # 42.8 % after 60 such pairs: Bi & Poo 2001, Annu Rev Neurosci 24:139 (read second-hand).
    assert 60 * 100 * first.change == pytest.approx(42.85, abs=0.01)


def test_parameters_of_ones_own() -> None:
    made = predict(
        CSV,
        "s.csv",
        rule="pair-nearest",
        parameters=[
            "a_plus=0.1",
            "a_minus=0",
            "tau_plus_ms=10",
            "tau_minus_ms=10",
            "nearest=presynaptic",
        ],
    )
    assert made.parameter_set == "own"
    assert made.change == pytest.approx(0.1 * 2.718281828459045**-1)
    assert "NO PREPARATION NAMED" in as_text(made)
    assert as_json(made)["change_pct"] == pytest.approx(3.678794)


def test_more_pairs_than_the_source_had_are_said_to_extrapolate() -> None:
    rows = "".join(f"{n},pre\n{n}.01,post\n" for n in range(61))
    made = predict("at_s,side\n" + rows, "s.csv", rule="pair-all", set_name="bi-poo-2001")
    assert "EXTRAPOLATION: 61 pairings extrapolate" in as_text(made)
    few = predict("at_s,side\n" + rows[: rows.index("60,pre")], "s.csv", rule="pair-all",
                  set_name="bi-poo-2001")  # fmt: skip
    assert few.extrapolation is None


@pytest.mark.parametrize(
    ("text", "sentence"),
    [
        ("", "s.csv: line 1: the columns at_s (or at_ms) and side are needed; there are none."),
        ("time,side\n", "s.csv: line 1: the columns"),
        ("at_s,side\n", "s.csv: no spike below the header."),
        ("at_s,side\n1,pre\nx,post\n", "s.csv: line 3: at_s = 'x': a finite number is needed."),
        ("at_s,side\nnan,post\n", "s.csv: line 2: at_s = 'nan': a finite number is needed."),
        ("at_s,side\n1,left\n", "s.csv: line 2: side = 'left': pre or post is needed."),
        ("at_s,side\n1\n", "s.csv: line 2: 1 cells; 2 are needed."),
    ],
)
def test_bad_rows(text: str, sentence: str) -> None:
    with pytest.raises(InputError) as caught:
        predict(text, "s.csv", rule="pair-all")
    assert str(caught.value).startswith(sentence)


@pytest.mark.parametrize("item", ["a_plus", "a_plus=x", "b=1"])
def test_bad_parameters(item: str) -> None:
    with pytest.raises(InputError, match="--param"):
        predict(CSV, "s.csv", rule="pair-all", parameters=[item])
