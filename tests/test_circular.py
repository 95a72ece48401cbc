"""The circular: 7 bits, 72 columns, sentences, and the numbers of the results."""

from __future__ import annotations

import re
from dataclasses import replace

import pytest
from skytally.campaign import ReportText
from skytally.circular import render_circular
from skytally.errors import UsageError
from skytally.findings import Finding
from skytally.results import LogCount, Results
from skytally.tally import TallyRow, Timeline
from skytally.wording import headline, source_probability
from small_results import renamed, small_results, small_row
from space_results import SOURCES, with_space

# Nouns after "1 " that end in s, a percentage that rounds to nothing, and words of Python.
BAD = re.compile(r"\b1 [a-z]+s\b|(?<![\d.])0\.0+ %|\bNone\b|\bnan\b|\binf\b|[ \t]+$", re.M)


def many(count: int) -> Results:
    first = small_results().exposures[0]
    exposures = tuple(replace(first, row=i, exposure=f"h{i}") for i in range(count))
    return small_results(exposures=exposures)


def nothing() -> Results:
    rows = tuple(
        small_row(
            **{
                **dict.fromkeys(
                    (
                        "depth_min",
                        "depth_median",
                        "depth_max",
                        "depth_over_50",
                        "depth_over_90",
                        "first_start",
                        "last_end",
                    )
                ),
                **{
                    name: 0
                    for name in TallyRow.__dataclass_fields__
                    if name.startswith(("area", "probability", "exposures"))
                },
                "map": version,
            }
        )
        for version in ("1 first", "2 update")
    )
    base = small_results()
    return small_results(
        rows=rows,
        exposures=(),
        timelines=(),
        as_pointed=(),
        telescopes=tuple(replace(t, exposures=0, bands=()) for t in base.telescopes),
        logs=(LogCount("Heron", "logs/heron.csv", 1, 0, 1, (("before the event", 1),)),),
    )


def off_the_map() -> Results:
    none = {n: 0.0 for n in TallyRow.__dataclass_fields__ if n.startswith("probability")}
    none |= {"area_in_50_deg2": 0.0, "area_in_90_deg2": 0.0}
    return small_results(rows=tuple(replace(r, **none) for r in small_results().rows))


def small_probability() -> Results:
    tiny = {"probability": 4e-6, "probability_low": 0.0, "probability_high": 0.05}
    return small_results(rows=tuple(replace(r, **tiny) for r in small_results().rows))


def odd_names() -> Results:
    names = ("Heron " + "q" * 200, "Plöver\x1b[31m\n\tβ")
    base = renamed(small_results(), *names)
    heron = replace(base.telescopes[0], bands=("Ångström–wide " * 3,))
    plover = replace(base.telescopes[1], camera="field of 1° ± 2″ ≥ σ²")
    return replace(
        base,
        event=replace(base.event, name="Łantærn ﬁve 七"),
        telescopes=(heron, plover),
        exposures=tuple(replace(e, band="Ångström–wide") for e in base.exposures),
    )


def one_of_each() -> Results:
    base = small_results()
    return small_results(
        maps=base.maps[-1:],
        telescopes=base.telescopes[1:],
        exposures=base.exposures[2:],
        rows=tuple(
            replace(r, exposures=1)
            for r in base.rows
            if r.map == "2 update" and r.telescope in (None, "Plover") and r.band in (None, "r")
        ),
        logs=(LogCount("Plover", "logs/plover.csv", 1, 1, 0, ()),),
    )


CASES = {
    "plain": small_results,
    "30 exposures": lambda: many(30),
    "31 exposures": lambda: many(31),
    "no exposure": nothing,
    "off the map": off_the_map,
    "small probability": small_probability,
    "odd names": odd_names,
    "one of each": one_of_each,
    "with distances": lambda: with_space(small_results()),
    "distances, off the map": lambda: with_space(off_the_map()),
    "distances, no exposure": lambda: with_space(nothing()),
    "distances, no source": lambda: with_space(small_results(), sources=()),
}


@pytest.mark.parametrize("case", CASES)
def test_seven_bits_seventy_two_columns_and_clean_words(case: str) -> None:
    text = render_circular(CASES[case]())
    assert text.isascii()
    assert all(c == "\n" or c.isprintable() for c in text)
    assert max(map(len, text.splitlines())) <= 72
    assert text.endswith(".\n")
    assert BAD.search(text) is None, BAD.search(text)


def test_names_are_transliterated_not_lost() -> None:
    text = render_circular(odd_names())
    assert "Lantaern five ?" in text
    assert "Plover[31m?" in text
    assert "Angstrom-wide" in text
    assert "field of 1 deg +/- 2" in text


# How many digits are shown is the wording's affair, tested there: zeros may follow.
def shown(text: str) -> str:
    return re.sub(r"(\d+\.\d*?)0+\b", r"\1", " ".join(text.split()))


def test_the_numbers_are_those_of_the_results() -> None:
    text = render_circular(small_results())
    for wanted in (
        "33.33 % (33.25-33.41 %) of the probability",  # 1/3 in [0.3325, 0.3341]
        "16.67 % (16.62-16.71 %) of the probability",  # half of it, bounds rounded outwards
        "5.75 deg^2 (5.74-5.76 deg^2)",
        "4.25 deg^2 in the 90 % region, which is 5.3 % of its area",  # 4.25 / 80
        "Heron (rectangle 1.6 x 1.2 deg): 2 exposures in g, 33.33 % (33.25-33.41 %)",
        "14.4 h after the event",
        "Heron, g: 20.90-21.40 mag, median 21.25 mag (2 exposures)",
        "Plover, r: no limits in the log (1 exposure)",
        "AB, 5 sigma, not corrected for Galactic extinction",
        "The logs of Heron and Plover are included. They hold 5 rows: 3 used, 2 set aside "
        "(1 not accepted and 1 unreadable).",
    ):
        assert shown(wanted) in shown(text)
    assert text.index("33.33 %") < text.index("16.67 %"), "the newest version comes first"


def test_few_exposures_are_listed_and_many_summed_by_night() -> None:
    few, many_of_them = render_circular(many(30)), render_circular(many(31))
    assert few.count("2031-03-14 19:43:12    14.4  g") == 30
    assert "Night" not in few
    assert "19:43:12" not in many_of_them.replace("began at", "")
    night = next(line for line in many_of_them.splitlines() if line.startswith("2031-03-14  "))
    assert shown(night) == "2031-03-14 3 5.75 deg^2 33.33 % (33.25-33.41 %)"


def test_nothing_covered_is_said_in_words() -> None:
    assert "none of the probability" in render_circular(off_the_map())
    text = " ".join(render_circular(nothing()).split())
    assert "No exposure of Lantern 7 could be used" in text
    assert (
        "The log of Heron is included. It holds 1 row: 0 used, 1 set aside (1 before the event)."
        in text
    )


def test_one_version_is_not_called_the_newest() -> None:
    text = render_circular(one_of_each())
    assert "The only map version" in text
    assert "earlier" not in text
    assert "one telescope has" in " ".join(text.split())


def test_each_source_has_its_sentence_with_what_was_lost() -> None:
    results = with_space(small_results())
    text = " ".join(render_circular(results).split())
    row = next(
        r
        for r in results.source_rows
        if (r.map, r.source, r.telescope, r.band, r.night) == ("2 update", "Steady", *[None] * 3)
    )
    shown = source_probability(row).replace("\N{NO-BREAK SPACE}", " ").replace("–", "-")
    assert (
        'A source "Steady" with absolute AB magnitude -16 in every band, constant from the event '
        "on (no K-correction; detection certain down to the limit and impossible beyond; seen "
        f"means in one exposure), would have been detected over {shown} of the probability of "
        'map version "2 update"; of the rest, 3.0 % was covered but lies beyond reach or was '
        "missed and 0.3 % was covered where the map gives no distance."
    ) in text
    # 30 % of a third, less one hundredth of it: the parts of what is covered.
    assert row.probability + 0.03 + 1 / 300 == pytest.approx(1 / 3)
    assert text.count("would have been detected") == len(SOURCES)
    assert "no distance" not in text.replace("where the map gives no distance", "")


def test_limits_stand_at_the_distance_of_the_map() -> None:
    text = " ".join(render_circular(with_space(small_results())).split())
    # 21.25 - 5 log10(142.3e5) = -14.516, and 0.54 and 0.43 mag to either side.
    assert "- Heron, g: -14.52 mag (-13.98 and -14.95 mag)" in text
    head = text[text.index("Median limits as absolute") :][:260]
    assert "142 +/- 31 Mpc" in head
    assert "AB, 5 sigma, not corrected for Galactic extinction" in head


def test_a_map_without_distance_says_only_that() -> None:
    text = render_circular(small_results())
    assert text.count("The map carries no distance.") == 1
    assert "absolute" not in text
    assert "The map carries no distance." not in render_circular(with_space(small_results()))


def test_limits_of_unlike_correction_say_each_what_they_are() -> None:
    base = small_results()
    rows = tuple(
        replace(r, extinction="corrected", extinction_median=0.31)
        if r.band == "g" and r.depth_median is not None
        else r
        for r in base.rows
    )
    text = " ".join(render_circular(replace(base, rows=rows)).split())
    assert (
        "Limiting magnitudes (AB, 5 sigma, corrected for Galactic extinction, median A = 0.31"
        in text
    )
    assert "Exposures by Heron (limits not corrected for Galactic extinction):" in text
    more = (
        *rows,
        small_row(map="2 update", telescope="Plover", band="i"),
        small_row(map="2 update", band="i"),
    )
    text = " ".join(render_circular(replace(base, rows=more)).split())
    assert "(AB, 5 sigma, partly corrected for Galactic extinction, median A = 0.31 mag):" in text
    assert "(3 exposures), not corrected for Galactic extinction" in text
    assert "(2 exposures), corrected for Galactic extinction, median A = 0.31 mag" in text


def sentence(text: str) -> str:
    return " ".join(text.split())


def test_authors_affiliations_and_thanks_stand_where_a_circular_has_them() -> None:
    report = ReportText(("Björn A.", "C. D.", "E. F."), ("Quenna\nDesk", "Tolmen"), "We  thank.")
    text = render_circular(small_results(report=report))
    assert text.startswith(
        "Lantern 7: coverage by two telescopes\n\n"
        "Bjorn A., C. D. and E. F.\nQuenna Desk\nTolmen\n\n"
    )
    assert "\n\nWe thank.\n\nNumbers by" in text


def error(subject: str, code: str = "sun-up") -> Finding:
    return Finding(code, "error", subject, (2, 3), "Seen.", "The numbers are as logged.", "Look.")


def test_an_error_is_told_in_a_sentence_and_a_mere_caution_is_not() -> None:
    one = small_results(findings=(error("Heron"), replace(error("Plover"), severity="caution")))
    for form in ("long", "short"):
        assert (
            "The audit found an error in the log of Heron: exposures in daylight (2 rows). "
            "The numbers are as logged."
        ) in sentence(render_circular(one, form))
        assert "log of Plover:" not in sentence(render_circular(one, form))
    two = small_results(findings=(error("Heron"), error("1 first", "map-before-event")))
    text = sentence(render_circular(two))
    assert "The audit found two errors: - in the log of Heron: exposures in daylight" in text
    assert '- in map version "1 first": a map issued before the event (2 rows).' in text
    assert "audit" not in render_circular(one, telescope="Plover")
    many = small_results(findings=(error("Heron"),) * 10)
    assert "- and 2 more errors, listed in the report." in render_circular(many)


def test_a_log_that_could_not_be_read_is_told_once() -> None:
    base = small_results()
    lost = replace(base.logs[1], read=0, used=0, set_aside=0, reasons=(), fault="p.csv: no ra.")
    results = replace(base, logs=(base.logs[0], lost))
    text = sentence(render_circular(results))
    assert text.count("could not be read") == 1
    assert "Without Plover, whose log could not be read: by 2031" in text
    assert "The log of Heron is included. It holds 2 rows; none was set aside." in text
    text = sentence(render_circular(results, telescope="Plover"))
    assert "The log of Plover could not be read, so its exposures are in no number." in text
    assert "could not" not in render_circular(results, telescope="Heron")


def test_the_short_form_keeps_the_answer_and_what_it_must_be_read_with() -> None:
    results = small_results()
    long, short = render_circular(results), render_circular(results, "short")
    assert len(short.splitlines()) < len(long.splitlines()) / 2
    assert sentence(headline(results)).split("covered")[0] in sentence(short)
    assert (
        "The exposures are by Heron (2 exposures in g) and Plover (1 exposure in r)."
        in sentence(short)
    )
    assert "Exposures by" not in short


def test_a_telescope_is_told_of_alone_and_of_the_whole() -> None:
    text = sentence(render_circular(small_results(), telescope="Heron"))
    assert text.startswith("Lantern 7: coverage by Heron By 2031-03-15 01:26 UTC, 20.1 h after")
    assert "Heron has covered 33.33 % (33.25-33.41 %) of the probability" in text
    assert (
        "Of the probability, 33.3 % is covered by Heron alone. With the log of Plover included, "
        "the two telescopes cover 33.33 % (33.25-33.41 %) of the probability."
    ) in text
    assert "Plover," not in text
    assert "not accepted" not in text, "that is another log's"
    with pytest.raises(UsageError, match=r"no telescope 'Dunlin'.*'Heron', 'Plover'"):
        render_circular(small_results(), telescope="Dunlin")


def test_a_telescope_of_many_exposures_has_running_sums_by_night() -> None:
    base = many(31)
    own = Timeline("2 update", "Heron", None, None, ("", ""), (14.4011, 20.0), (0.1, 1 / 3), (1, 5))
    nights = ("2031-03-13", "2031-03-14")
    exposures = tuple(
        replace(e, night=nights[i > 0], end=("2031-03-14T19:45:12Z", "2031-03-15T01:26:00Z")[i > 0])
        for i, e in enumerate(base.exposures)
    )
    text = render_circular(
        replace(base, exposures=exposures, timelines=(*base.timelines, own)), telescope="Heron"
    )
    rows = [line.split() for line in text.splitlines() if line.startswith(nights)]
    # 0.1 by the end of the first night, a third by that of the second.
    assert [(r[0], r[1], r[-2]) for r in rows[-2:]] == [
        (nights[0], "1", "10.0"),
        (nights[1], "30", "33.3"),
    ]
    assert "Prob. so far" in text
