"""One sentence a finding: what, where, how much, since when, how sure, why, which lots."""

from __future__ import annotations

from dataclasses import replace
from datetime import timedelta
from typing import Any

import pytest

from reports.model import Level, Magnitude, Suspect
from reports.numbers import LocalClock, plain
from reports.sentences import (
    forecast_sentence,
    headline,
    night_sentence,
    rule_words,
    sentence,
    tally,
    where,
)
from tests.reports import samples

CLOCK = LocalClock(samples.ZONE, samples.AS_OF)


def test_a_shift_says_everything_in_one_sentence() -> None:
    said = plain(sentence(samples.excursion(), CLOCK))
    for part in (
        "M1 resist thickness",
        "TRK2 CUP1",
        "−5.9 nm",
        "−7.1 to −4.7 nm",
        "since Tue 22:40",
        "between Tue 17:10 and 23:40",
        "by chance alone p < 0.0001",
        "likely cause tool TRK2, module CUP1",
        "14 lots touched, 4 measured",
    ):
        assert part in said
    assert said.endswith(".")
    assert said.count(". ") == 0


def test_what_is_over_says_so() -> None:
    last = samples.AS_OF - timedelta(hours=12)
    said = plain(sentence(samples.excursion(end=last), CLOCK))
    assert f"over by now: last seen {plain(CLOCK.moment(last))}" in said
    silent = plain(sentence(samples.excursion(pattern="silence", magnitude=None, end=last), CLOCK))
    assert "readings came again by" in silent
    assert "over by now" not in plain(sentence(samples.excursion(), CLOCK))


def test_the_headline_reads_as_in_a_subject() -> None:
    said = plain(headline(samples.excursion(), CLOCK))
    assert said == "TRK2 CUP1 M1 resist thickness −5.9 nm since Tue 22:40"


@pytest.mark.parametrize("pattern", ["shift", "drift", "spike", "spread", "map", "silence"])
@pytest.mark.parametrize("bounded", [True, False])
def test_every_form_has_its_sentence(pattern: Any, bounded: bool) -> None:
    size = Magnitude(-5.9, -7.0, -4.8, "nm", None) if bounded else Magnitude(-5.9, None, None, "nm")
    found = samples.excursion(
        pattern=pattern, magnitude=None if pattern == "silence" else size, p_chance=None
    )
    said = plain(sentence(found, CLOCK))
    assert ("95 %" in said) is (bounded and pattern != "silence")
    assert "Tue 22:40" in said
    assert "  " not in said
    assert "None" not in said
    assert "  " not in headline(found, CLOCK)


def test_levels_that_cannot_be_told_apart_are_named_together() -> None:
    suspect = Suspect("reticle", "RT-118", 3.0, 0.003, (Level("recipe", "EXP-M1-07"),))
    said = plain(sentence(samples.excursion(suspects=(suspect,)), CLOCK))
    assert (
        "reticle RT-118 or recipe EXP-M1-07, which the data cannot tell apart (p = 0.003)" in said
    )
    assert "no cause stands out" in sentence(samples.excursion(suspects=()), CLOCK)


def test_several_streams_are_named_by_what_they_share() -> None:
    one = samples.excursion().streams[0]
    streams = tuple(
        replace(one, context={"tool": "TRK2", "module": f"CUP{i}"}) for i in range(1, 6)
    )
    assert where(samples.excursion(streams=streams[:2])) == "TRK2 CUP1 and TRK2 CUP2"
    assert where(samples.excursion(streams=streams)) == "TRK2 (5 streams)"


def test_rules_are_named_in_words() -> None:
    assert rule_words("beyond-3s") == "beyond 3 sigma"
    assert rule_words("2of3-beyond-2s") == "2 of 3 beyond 2 sigma on one side"
    assert rule_words("4of5-beyond-1.5s") == "4 of 5 beyond 1.5 sigma on one side"
    assert rule_words("8-one-side") == "8 in a row on one side"
    assert rule_words("6-trending") == "6 in a row rising or falling"
    assert rule_words("15-within-1s") == "15 in a row within 1 sigma"
    assert rule_words("out-of-spec") == "out of spec"


def test_the_night_in_one_sentence() -> None:
    assert night_sentence(samples.quiet_night()) == (
        "A quiet night: nothing moved on the 212 streams looked at."
    )
    assert night_sentence(samples.night()).startswith("2 to act on, 2 to watch: 3 new excursions")
    assert "1 excursion from earlier is still open" in night_sentence(samples.night())
    assert tally(2, 0) == "2 to act on"
    assert tally(0, 1) == "1 to watch"


def test_a_forecast_says_when_and_what_it_does_to_cpk() -> None:
    drift = samples.cards()[1].excursion
    said = plain(forecast_sentence(drift, CLOCK))
    assert "upper spec Wed 11 Nov 17:30" in said
    assert "Cpk goes from 1.31 to 0.84" in said
    assert forecast_sentence(samples.excursion(), CLOCK) == ""


def test_hostile_names_cannot_turn_a_sentence_round() -> None:
    streams = (replace(samples.excursion().streams[0], context={"tool": samples.HOSTILE[3]}),)
    said = sentence(samples.excursion(streams=streams), CLOCK)
    assert "\u202e" not in said
    assert "U+202E" in said


def test_a_rule_is_said_in_short_where_there_is_little_room() -> None:
    assert rule_words("2of3-beyond-2s", short=True) == "2 of 3 beyond 2 sigma"
    assert rule_words("beyond-3s", short=True) == "beyond 3 sigma"
