"""What is shown: the digits follow the uncertainty, nothing runs over the edge, and the strip tells a clean decay from another."""

from __future__ import annotations

import csv
import io
import math
from dataclasses import replace
from xml.etree import ElementTree

import pytest
from hypothesis import given
from hypothesis import strategies as st
from rich.cells import cell_len
from rich.console import Console
from rich.text import Text

from qmeter.estimate.modes import DecayTrace, Doubt, Strike
from qmeter.show import picture, pitch, plain, spreadsheet, strip, table, words
from qmeter.show.document import FIGURES, Pooled
from qmeter.show.look import Look, look_of
from qmeter.uncertainty import Figure
from tests import fakes

ASCII = Look(unicode=False)


def lines_of(page: Text) -> list[str]:
    """A page as a terminal would print it."""
    return [line.rstrip() for line in page.plain.splitlines()]


def straight(*, slope_db_per_s: float = -60.0, until_s: float = 0.8, tail: bool = True, bend_db: float = 0.0) -> DecayTrace:
    """A noiseless decay from 0 dBFS to a floor at -90 dBFS; `bend_db` lifts its middle."""
    step = until_s / 100
    points = 140 if tail else 101
    level = [slope_db_per_s * n * step + bend_db * math.sin(math.pi * min(n / 100, 1.0)) for n in range(points)]
    return DecayTrace(0.0, step, tuple(level), -90.0, 0.0, until_s, (0.0, slope_db_per_s * until_s))


# ---- the page ----


def test_page_at_80_columns() -> None:
    """The whole page, as it stands on a terminal of 80 columns."""
    assert lines_of(table.render_measurement(fakes.plate(), 80)) == PAGE_80.strip("\n").splitlines()


def test_page_at_120_columns() -> None:
    """Wider, the second route, levels, strikes and notes join in."""
    assert lines_of(table.render_measurement(fakes.plate(), 120, a4_hz=440.0)) == PAGE_120.strip("\n").splitlines()


def test_page_in_ascii() -> None:
    """A terminal without Unicode gets the same in plain characters."""
    page = table.render_measurement(fakes.bar(), 80, view=ASCII)
    assert page.plain.isascii()
    assert lines_of(page) == PAGE_ASCII.strip("\n").splitlines()


@given(
    width=st.integers(20, 200), unicode=st.booleans(), a4=st.sampled_from([None, 440.0]), which=st.sampled_from(["plate", "bar", "silence"])
)
def test_no_line_is_wider_than_the_terminal(width: int, unicode: bool, a4: float | None, which: str) -> None:
    """At any width, and in either set of characters; words longer than the width are broken."""
    page = table.render_measurement(getattr(fakes, which)(), width, view=Look(unicode=unicode), a4_hz=a4)
    assert max(cell_len(line) for line in lines_of(page)) <= width


@pytest.mark.parametrize("unicode", [True, False])
def test_the_four_figures_are_the_last_to_go(unicode: bool) -> None:
    """At 50 columns frequency, Q, T60 and cycles are all there still; the strip is there at 80."""
    view = Look(unicode=unicode)
    narrow = table.render_measurement(fakes.plate(), 50, view=view).plain
    assert all(head in narrow for head in ("frequency", "Q", "T60", "cycles"))
    assert "dB a step" not in narrow
    assert "dB a step" in table.render_measurement(fakes.plate(), 80, view=view).plain


def test_digits_follow_the_uncertainty() -> None:
    """Each value ends at the decimal place of its u95, which stands beneath it, point under point."""
    rows = lines_of(table.render_measurement(fakes.plate(), 80))
    above = next(row for row in rows if "184.120" in row)
    below = rows[rows.index(above) + 1]
    for value, u95 in (("184.120", "±0.059"), ("61.2", "±2.8"), ("0.731", "±0.033")):
        assert above.index(value) + len(value) == below.index(u95) + len(u95)
        assert above.index(value) + value.index(".") == below.index(u95) + u95.index(".")


def test_no_value_without_an_uncertainty() -> None:
    """Where none could be stated, a question mark stands in its place and a doubt is below."""
    rows = lines_of(table.render_measurement(fakes.bar(), 80))
    place = next(index for index, row in enumerate(rows) if "12700" in row)
    assert rows[place].startswith("?")
    assert rows[place + 1].split()[:4] == ["±?"] * 4
    assert any(row.startswith("? 12700 Hz: Only 11 dB") for row in rows)


def test_modes_stand_from_low_to_high() -> None:
    """So that a close pair stands together and tables of two plates can be compared."""
    rows = lines_of(table.render_measurement(fakes.plate(), 80))
    shown = [float(row.lstrip("? ").split()[0]) for row in rows[6:20:2]]
    assert shown == sorted(shown)
    assert len(shown) == 7


def test_nothing_is_carried_by_colour_alone() -> None:
    """Without colour the doubted rows, the disagreeing route and the fitted part can still be told."""
    rows = lines_of(table.render_measurement(fakes.plate(), 120))
    assert sum(row.startswith("?   ") for row in rows) == 4
    assert sum("≠39.3" in row for row in rows) == 1


def test_no_escapes_without_colour() -> None:
    """NO_COLOR leaves no colour codes (bold may stay); a file gets none at all."""
    out = io.StringIO()
    Console(file=out, width=80, force_terminal=True, no_color=True, color_system="truecolor").print(
        table.render_measurement(fakes.bar(), 80)
    )
    assert "\x1b[38" not in out.getvalue() and "\x1b[1;38" not in out.getvalue()
    out = io.StringIO()
    Console(file=out, width=80).print(table.render_measurement(fakes.bar(), 80))
    assert "\x1b" not in out.getvalue()


def test_control_characters_in_a_file_name_do_not_reach_the_terminal() -> None:
    """A file name may hold an escape; it is shown as a replacement character."""
    measurement = replace(fakes.silence(), file="a\x1b[31mb\nc.wav")
    for page in (table.render_measurement(measurement, 80).plain, plain.render_measurement(measurement)):
        assert "\x1b" not in page
        assert "a\ufffd[31mb\ufffdc.wav" in page


def test_look_of_a_terminal() -> None:
    """ASCII for a dumb terminal and for an encoding without braille, Unicode else."""

    class Latin(io.StringIO):
        encoding = "cp1252"

    class Utf8(io.StringIO):
        encoding = "utf-8"

    assert look_of(Console(file=Utf8(), force_terminal=True, legacy_windows=False, _environ={"TERM": "xterm-256color"})).unicode
    assert not look_of(Console(file=Utf8(), force_terminal=True, legacy_windows=False, _environ={"TERM": "dumb"})).unicode
    assert not look_of(Console(file=Latin(), force_terminal=True, legacy_windows=False, _environ={"TERM": "xterm-256color"})).unicode


# ---- the strip ----


@pytest.mark.parametrize("unicode", [True, False])
@pytest.mark.parametrize("width", [14, 26, 44])
def test_a_clean_decay_is_a_straight_stroke(unicode: bool, width: int) -> None:
    """The level falls and never rises, and the lower line is straight as far as the fit reaches."""
    upper, lower = strip.draw(straight(), width=width, depth=64, unicode=unicode)
    assert len(upper.plain) == len(lower.plain) == width
    heights = ["".join(strip._LEVELS if unicode else strip._LEVELS_ASCII).index(glyph) for glyph in upper.plain]
    assert heights == sorted(heights, reverse=True) and heights[0] == 8
    stroke = lower.plain.rstrip()
    assert set(stroke) == {"─" if unicode else "-"}
    assert len(stroke) == pytest.approx(width / strip._BEYOND_FIT, abs=1.0)


@pytest.mark.parametrize(("bend", "glyph"), [(3.0, "⠉"), (1.0, "⠒"), (-1.0, "⠤"), (-3.0, "⣀")])
def test_a_curved_decay_bows(bend: float, glyph: str) -> None:
    """The lower line leaves the middle by one step a decibel, to the side to which the level strays."""
    _, lower = strip.draw(straight(bend_db=bend), width=26, depth=64)
    assert lower.plain[10] == glyph
    assert lower.plain[0] in "─⠒⠤"


def test_what_was_not_used_is_dim_and_has_no_stroke_beneath() -> None:
    """Shape says it (no stroke), and brightness once more."""
    upper, lower = strip.draw(straight(), width=26, depth=64)
    assert lower.plain.endswith(" " * 5)
    dim = [span for span in upper.spans if "dim" in str(span.style)]
    assert dim and min(span.start for span in dim) == len(lower.plain.rstrip())


def test_the_floor_is_dotted_where_the_recording_ends() -> None:
    """A ring that was cut off has no level after the fit; the floor stands there at its height, as dots."""
    cut = replace(straight(tail=False), floor_dbfs=-50.0)
    upper, _ = strip.draw(cut, width=26, depth=64)
    assert upper.plain.endswith("⣀⣀⣀⣀")
    assert strip.draw(cut, width=26, depth=64, unicode=False)[0].plain.endswith("....")


def test_meeting_the_noise_is_no_departure() -> None:
    """The envelope of ring and noise lies above the line by 3 dB where they are equal; that is the model, not an error."""
    floor, until = -40.0, 40.0 / 60.0
    step = until / 100
    power = [10.0 ** (-6.0 * n * step) + 10.0 ** (floor / 10.0) for n in range(140)]
    trace = DecayTrace(0.0, step, tuple(10.0 * math.log10(p) for p in power), floor, 0.0, until, (0.0, floor))
    _, lower = strip.draw(trace, width=26, depth=48)
    assert set(lower.plain.rstrip()) == {"─"}


def test_depth_reaches_the_deepest_floor() -> None:
    """One height for all strips of a table, from a short list."""
    assert strip.depth_db([straight()]) == 96
    assert strip.depth_db([fakes.trace(10.0, -10.0, -50.0)]) in (40, 48)
    assert strip.depth_db([replace(straight(), floor_dbfs=-math.inf)]) == 48


def test_strip_bears_with_gaps() -> None:
    """Minus infinity, NaN and an empty trace draw something of the right width and raise nothing."""
    for levels in ((), (-10.0,), (-10.0, -math.inf, math.nan, -20.0)):
        trace = DecayTrace(0.0, 0.01, levels, -math.inf, 0.0, 0.03, (-10.0, -20.0))
        for unicode in (True, False):
            upper, lower = strip.draw(trace, width=20, depth=32, unicode=unicode)
            assert len(upper.plain) == len(lower.plain) == 20


# ---- notes and beats ----


@pytest.mark.parametrize(
    ("hertz", "name", "cents"),
    [(440.0, "A4", 0.0), (261.6255653, "C4", 0.0), (27.5, "A0", 0.0), (445.0, "A4", 19.56), (430.0, "A4", -39.80), (8.1757989, "C-1", 0.0)],
)
def test_notes_of_equal_temperament(hertz: float, name: str, cents: float) -> None:
    """Common practice: A4 = 440 Hz, C4 = 261.626 Hz, the piano's lowest A 27.5 Hz; 445 Hz is 19.56 cents above A4."""
    note = pitch.note_of(Figure(hertz, 0.1), 440.0)
    assert note.name == name
    assert note.cents.value == pytest.approx(cents, rel=0, abs=0.01)


def test_cents_carry_the_uncertainty_of_the_frequency() -> None:
    """One per cent of a frequency is 17.3 cents (1200 / ln 2 / 100); A4 = 432 moves every note by 31.77 cents."""
    assert pitch.note_of(Figure(440.0, 4.4), 440.0).cents.u95 == pytest.approx(17.312, rel=1e-4, abs=0)
    assert pitch.note_of(Figure(440.0, None), 440.0).cents.u95 is None
    assert pitch.note_of(Figure(440.0, 0.1), 432.0).cents.value == pytest.approx(31.7667, rel=1e-4, abs=0)


def test_beats_of_a_close_pair_only() -> None:
    """351.06 and 353.37 Hz beat 2.31 times a second, without the clock's part; no other two are close."""
    (beat,) = pitch.beats(fakes.plate().modes)
    assert (beat.lower.damped_frequency_hz, beat.upper.damped_frequency_hz) == (351.06, 353.37)
    assert beat.per_second.value == pytest.approx(2.31, rel=1e-9, abs=0)
    lower, upper = fakes.mode(351.06, 71.9, u_q=1e-9), fakes.mode(353.37, 69.0, u_q=1e-9)
    clock_only = pitch.beats((lower, upper))[0].per_second.u95
    assert clock_only is not None and lower.frequency_hz.u95 is not None
    assert clock_only < 1e-3 * lower.frequency_hz.u95
    assert not pitch.beats(fakes.bar().modes)


def test_beats_of_many_pairs() -> None:
    """A bell of many pairs shows the three loudest, in the order of the table, and says how many more; --pitch shows all."""
    levels = (-30.0, -10.0, -20.0, 0.0, -40.0)
    modes = [
        fakes.mode(hertz, 900.0, level_db=level) for n, level in enumerate(levels) for hertz in (500.0 * (n + 1), 500.0 * (n + 1) + 0.5)
    ]
    said = words.beats(modes, all_of_them=False)
    assert [sentence.split(".")[0] for sentence in said[:3]] == ["1000", "1500", "2000"]
    assert said[3] == "2 more close pairs, weaker than these: --pitch 440 shows all"
    assert len(words.beats(modes, all_of_them=True)) == 5


# ---- sentences ----


def strike(*codes: str, at: float = 1.0) -> Strike:
    """A strike set aside for these reasons, or kept when there are none."""
    return Strike(at, 1.0, -6.0, -60.0, not codes, tuple(Doubt(code, f"It is {code}.") for code in codes), ())


@pytest.mark.parametrize(
    ("strikes", "says"),
    [
        ((), "no strike found"),
        ((strike(),), "one strike, kept"),
        ((strike(), strike()), "2 strikes, all kept"),
        ((strike("cut-off", at=0.5),), "one strike; strike 1 (at 0.50 s) set aside: cut off"),
        ((strike(), strike("double-strike", at=2.345)), "1 of 2 strikes kept; strike 2 (at 2.35 s) set aside: double strike"),
        ((strike("no-ring"), strike("no-ring")), "none of 2 strikes kept; strikes 1 (at 1.00 s) and 2 (at 1.00 s) set aside: no ring"),
        ((strike(), replace(strike(at=3.0), accepted=False)), "1 of 2 strikes kept; strike 2 (at 3.00 s) set aside: nothing rang"),
        (
            (strike(), strike("clipped", at=1), strike("clipped", at=2), strike("cut-off", at=3)),
            "1 of 4 strikes kept; strikes 2 (at 1.00 s) and 3 (at 2.00 s) set aside: clipped; strike 4 (at 3.00 s) set aside: cut off",
        ),
    ],
)
def test_strikes_in_plain_words(strikes: tuple[Strike, ...], says: str) -> None:
    """How many were kept, and each reason with the strikes it set aside."""
    assert words.strikes(replace(fakes.silence(), strikes=strikes)) == says


def test_a_doubt_is_said_once() -> None:
    """Of the whole first; shared by modes once, with their frequencies; not again of a part what was said of the whole."""
    same = Doubt("cut-off", "The recording ends first.")
    modes = [fakes.mode(hertz, 50.0, doubts=(same, fakes.SINGLE)) for hertz in (300.0, 100.0)]
    whole, shared = words.gather((fakes.SINGLE,), [*modes, fakes.mode(500.0, 50.0)])
    assert (whole.about, whole.says) == ("", fakes.SINGLE.says)
    assert (shared.about, shared.says) == (f"{words.short_hz(modes[1])} and {words.short_hz(modes[0])}", same.says)
    assert words.gather((), modes)[0].about == "every mode"


def test_brief_doubts_are_one_sentence_a_code() -> None:
    """The table gives the strongest mode's words and names the others; plain text gives each its own words."""
    modes = [
        fakes.mode(hertz, 50.0, level_db=level, doubts=(Doubt("curved-decay", f"Curved by {dip} dB."),))
        for hertz, level, dip in ((100.0, -9.0, 1), (200.0, 0.0, 2), (300.0, -3.0, 3))
    ]
    brief = words.gather((), modes, [("strike 1", fakes.CLIPPED), ("strike 2", fakes.CLIPPED)], brief=True)
    assert [(each.about, each.says) for each in brief] == [
        (words.short_hz(modes[1]), f"Curved by 2 dB. Likewise {words.short_hz(modes[0])} and {words.short_hz(modes[2])}."),
        ("strike 1 and strike 2", fakes.CLIPPED.says),
    ]
    assert len(words.gather((), modes)) == 3


def test_long_lists_are_cut() -> None:
    """Forty modes with one doubt are not forty frequencies."""
    assert words.listed(["a"]) == "a"
    assert words.listed(["a", "b"]) == "a and b"
    assert words.listed(list("abcdef")) == "a, b, c, d, e and f"
    assert words.listed(list("abcdefgh")) == "a, b, c, d, e and 3 more"


# ---- plain, spreadsheet, picture ----


def test_plain_is_one_line_a_mode_and_never_wrapped() -> None:
    """Each mode's line has every figure with its u95; sentences stay whole."""
    page = plain.render_measurement(fakes.plate(), a4_hz=440.0)
    (row,) = [line for line in page.splitlines() if line.lstrip().startswith("184.120 ± 0.059 Hz")]
    assert "61.2 ± 2.8" in row and "0.731 ± 0.033 s" in row and " F♯3 " in row and row.endswith(" -8.23 ± 0.55")
    assert f"? 82.417 Hz: {fakes.CURVED.says}" in page.splitlines()
    assert "\x1b" not in page
    assert plain.render_measurement(fakes.plate(), view=ASCII, a4_hz=440.0).isascii()
    assert "? ± " not in page and "12700 ± ? Hz" in plain.render_measurement(fakes.bar())


def test_spreadsheet_is_rfc_4180() -> None:
    """Lines end in CRLF, every row is as long as the head, and a name with commas and quotes comes back whole."""
    named = replace(fakes.plate(), file='a "good", plate.wav')
    text = spreadsheet.render([named, fakes.bar(), fakes.silence()], a4_hz=440.0)
    assert text.count("\r\n") == text.count("\n") == 1 + 7 + 3
    rows = list(csv.reader(io.StringIO(text, newline="")))
    assert {len(row) for row in rows} == {len(rows[0])}
    assert rows[1][0] == 'a "good", plate.wav'
    first = dict(zip(rows[0], rows[1], strict=True))
    assert float(first["frequency_hz"]) == pytest.approx(184.12, rel=1e-9, abs=0)
    assert float(first["q_u95"]) == pytest.approx(2.72, rel=0.05, abs=0)
    assert first["note"] == "F♯3"
    assert all(name in first and f"{name}_u95" in first for name in FIGURES)
    last = dict(zip(rows[0], rows[-1], strict=True))
    assert last["q_u95"] == "" and last["doubts"] == "few-decibels"


def test_pooled_page_names_files_and_mountings() -> None:
    """How many files, which ways of holding, and at what place the mounting is the largest part of u95."""
    modes = tuple(fakes.mode(hertz, 61.2, strikes=9, mounting=0.05) for hertz in (184.12, 351.06))
    pooled = Pooled(("a.wav", "b.wav", "c.wav"), ("hung", "hung", "foam"), modes, (fakes.CLIPPED,))
    rows = lines_of(table.render_pooled(pooled, 120))
    assert rows[0] == "pooled over 3 files, 2 mountings: hung (2 files) and foam (1 file)"
    assert sum("mounting" in row for row in rows[5:10]) == 2
    assert plain.render_pooled(pooled).splitlines()[0] == rows[0]


def test_picture_stands_alone() -> None:
    """Well-formed SVG with the figures in it; it fetches nothing from anywhere, and nothing lies outside its frame."""
    page = table.render_measurement(fakes.plate(), 80)
    svg = picture.render([page, page], 80)
    root = ElementTree.fromstring(svg)
    assert svg.count("184.120") == 2
    assert "url(http" not in svg and "@import" not in svg and "@font-face" not in svg
    width, height = float(root.get("width", "0")), float(root.get("height", "0"))
    texts = [node for node in root.iter() if node.tag.endswith("}text") and (node.text or "").strip()]
    assert len(texts) > 100
    assert max(float(node.get("y", "0")) for node in texts) + 12 < height
    assert max(float(node.get("x", "0")) + float(node.get("textLength", "0")) for node in texts) + 12 <= width


def test_leading_blanks_are_no_part_of_a_run() -> None:
    """Some SVG renderers drop blanks at the start of a run and shift what follows; so no run of the table starts with one."""
    svg = picture.render([table.render_measurement(fakes.plate(), 120, a4_hz=440.0)], 120)
    runs = [node.text or "" for node in ElementTree.fromstring(svg).iter() if node.tag.endswith("}text")]
    shifted = [run for run in runs if run.startswith("\u00a0") and run.strip("\u00a0")]
    assert not shifted


PAGE_80 = """
spruce-plate.wav, channel 1 of 2, 48 kHz, 6.50 s
4 of 5 strikes kept; strike 3 (at 2.81 s) set aside: clipped

   frequency      Q      T60   cycles  Q from  decay, 64 dB high
          Hz               s  to e^-π   width  off the fit, 1 dB a step
─────────────────────────────────────────────────────────────────────────────
?     82.417   43.7   1.166      43.7   ≠39.3  ██▇▇▇▆▆▅▅▅▅▄▄▄▄▄▃▃▃▃▂▂▂▁ 44 dB
      ±0.037   ±2.0  ±0.053      ±2.0    ±1.4  ─⣀⣀⣀⣀⣀⣀⣀⣀⣀⣀⣀⣀⣀⣀⠤⠤⣀⠒ 0.91 s
     184.120   61.2   0.731      61.2    61.8  ███▇▇▇▆▆▆▅▅▅▅▄▄▄▃▃▃▃▃▂▃▂ 44 dB
      ±0.059   ±2.8  ±0.033      ±2.8    ±1.9  ──────────────⠒──⠒─ 0.57 s
?    351.060   71.9   0.450      71.9    72.6  ███▇▇▇▆▆▆▆▅▅▄▄▄▄▃▃▃▃▃▂▃▂ 44 dB
      ±0.096   ±3.3  ±0.021      ±3.3    ±2.2  ────────────────⠤⣀⠤ 0.35 s
?    353.37    69.0   0.429      69.0    69.7  ███▇▇▇▆▆▆▆▅▅▅▄▄▄▃▃▃▃▂▂▂▂ 44 dB
      ±0.29    ±9.3  ±0.058      ±9.3    ±2.1  ─────────────⠒⠒⠒⠒⠒⠉ 0.34 s
     512.80    88.0   0.377      88.0    88.9  ████▇▇▇▇▆▆▆▆▅▅▅▅▄▄▄▄▃▄▄▃ 35 dB
      ±0.12    ±4.0  ±0.017      ±4.0    ±2.7  ─────────────⠒⠒⠒⠤─⣀ 0.24 s
    1204.60   102.3   0.1867    102.3     -    █████▇▇▇▇▇▆▆▆▆▆▆▆▅▅▆▅▅▅▅ 24 dB
      ±0.26    ±5.2  ±0.0095     ±5.2          ────────⠒─⠤─⠤⠤⠤⠒──⣀ 84 ms
?   2310.0     97     0.092      97       -    ███████████▇▇▇▇▇▇▇▇▇▇▇▇▇ 9 dB
      ±9.2    ±84    ±0.080     ±84            ─⠤──⠤⠤────⠒⠤──⠒─⠒⠒⠒ 18 ms

~ 351.060 Hz and 353.37 Hz beat 2.31 ± 0.30 times a second
? One way of holding it: how far the support moves Q was not tested; hang it
  again and pool.
? 82.417 Hz: The decay is curved: Q is 58.1 over the first 12 dB and 66.0 over
  the last; the figure holds from -3 to -33 dB.
? 351.060 Hz and 353.37 Hz: Two modes ring 2.31 Hz apart, 0.9 half-power widths;
  each figure leans on the other.
? 2310.0 Hz: Only 11 dB of the decay stand above the noise, and a figure to be
  trusted wants 20; tap harder or quieten the room.
? strike 3: 37 samples sit at full scale in the first 4 ms; turn the input down
  by 6 dB.
"""

PAGE_120 = """
spruce-plate.wav, channel 1 of 2, 48 kHz, 6.50 s
4 of 5 strikes kept; strike 3 (at 2.81 s) set aside: clipped

   frequency      Q      T60   cycles          note  Q from       level   strikes  decay, 64 dB high
          Hz               s  to e^-π         cents   width  over noise  u95 from  off the fit, 1 dB a step
─────────────────────────────────────────────────────────────────────────────────────────────────────────────────────
?     82.417   43.7   1.166      43.7            E2   ≠39.3     -3.2 dB         4  ███▇▇▇▆▆▆▅▅▅▅▄▄▄▄▃▃▃▃▃▃▂▂▂▂▁ 44 dB
      ±0.037   ±2.0  ±0.053      ±2.0   +0.21 ±0.76    ±1.4       50 dB   scatter   ⠤⣀⣀⣀⣀⣀⣀⣀⣀⣀⣀⣀⣀⣀⣀⣀⣀⠤⠤⣀⠒ 0.91 s
     184.120   61.2   0.731      61.2           F♯3    61.8      0.0 dB         4  ████▇▇▇▆▆▆▆▅▅▅▅▄▄▄▄▃▃▃▃▂▃▂▃▂ 44 dB
      ±0.059   ±2.8  ±0.033      ±2.8   -8.23 ±0.55    ±1.9       50 dB   scatter   ──────────────⠤⠒──⠤⠒⠤ 0.57 s
?    351.060   71.9   0.450      71.9            F4    72.6     -6.1 dB         4  ████▇▇▇▆▆▆▆▅▅▅▄▄▄▄▃▃▃▃▃▂▂▂▃▂ 44 dB
      ±0.096   ±3.3  ±0.021      ±3.3   +9.06 ±0.48    ±2.2       50 dB   scatter   ────────────────⠤⠤⣀⣀⠤ 0.35 s
?    353.37    69.0   0.429      69.0            F4    69.7     -9.4 dB         4  ████▇▇▇▆▆▆▆▅▅▅▅▄▄▄▄▃▃▃▃▃▃▂▂▂ 44 dB
      ±0.29    ±9.3  ±0.058      ±9.3    +20.4 ±1.5    ±2.1       50 dB   scatter   ───────────────⠒⠒⠒⠒⠒⠉ 0.34 s
     512.80    88.0   0.377      88.0            C5    88.9    -14.0 dB         4  █████▇▇▇▇▆▆▆▆▆▅▅▅▅▄▄▄▄▄▃▄▄▃▃ 35 dB
      ±0.12    ±4.0  ±0.017      ±4.0  -34.93 ±0.40    ±2.7       41 dB   scatter   ──────────⠒───⠒─⠒⠤⠤─⣀ 0.24 s
    1204.60   102.3   0.1867    102.3            D6     -      -22.5 dB         3  ██████▇▇▇▇▇▇▆▆▆▆▆▆▆▆▅▅▅▅▅▅▅▄ 24 dB
      ±0.26    ±5.2  ±0.0095     ±5.2  +43.57 ±0.37               30 dB   scatter   ────────⠤⠒─⠤─⠤⠤──⠒──⠤ 84 ms
?   2310.0     97     0.092      97              D7     -      -33.1 dB         2  ████████████▇█▇█▇▇▇▇▇▇▇▇▇▇▇▇ 9 dB
      ±9.2    ±84    ±0.080     ±84      -29.2 ±6.9               15 dB   scatter   ─⠤──⠤⠤─⠒──⠉⠤──⠒⠒──⠒⠒⠉ 18 ms

~ 351.060 Hz and 353.37 Hz beat 2.31 ± 0.30 times a second
? One way of holding it: how far the support moves Q was not tested; hang it again and pool.
? 82.417 Hz: The decay is curved: Q is 58.1 over the first 12 dB and 66.0 over the last; the figure
  holds from -3 to -33 dB.
? 351.060 Hz and 353.37 Hz: Two modes ring 2.31 Hz apart, 0.9 half-power widths; each figure leans
  on the other.
? 2310.0 Hz: Only 11 dB of the decay stand above the noise, and a figure to be trusted wants 20; tap
  harder or quieten the room.
? strike 3: 37 samples sit at full scale in the first 4 ms; turn the input down by 6 dB.
"""

PAGE_ASCII = """
bar.wav, 44.1 kHz, 6.00 s
one strike, kept

   frequency       Q        T60    cycles  decay, 64 dB high
          Hz                  s  to e^-pi  off the fit, 1 dB a step
-----------------------------------------------------------------------------
     1046.31  2412.0     5.069     2412.0  @@@###***+++===---:::.... .. 56 dB
     +/-0.12  +/-9.9  +/-0.021     +/-9.9   --------------^------ 4.98 s
     2884.90  1502.0     1.1448    1502.0  @@@####***+++====----:::::.: 49 dB
     +/-0.33  +/-9.3  +/-0.0071    +/-9.3   ----------------^__^_ 0.99 s
?   12700      611       0.106      611    @@@@@@#####******++++++==++= 27 dB
     +/-?     +/-?    +/-?         +/-?     --------^-----_-_-_-- 53 ms

? One strike cannot show how the figures scatter; tap five times.
? One way of holding it: how far the support moves Q was not tested; hang it
  again and pool.
? 12700 Hz: Only 11 dB of the decay stand above the noise, and a figure to be
  trusted wants 20; tap harder or quieten the room.
"""
