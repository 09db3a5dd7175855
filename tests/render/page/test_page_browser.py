"""The page in a real Chromium: quiet, in step, without clicks, blind, and safe."""

import csv
import re
import time

import numpy as np
import pytest
from scipy import signal, stats
from sweepset.render.page.data import PagePair

RATE = 48_000
pytestmark = pytest.mark.browser

HOSTILE = "<img src=x onerror=alert(1)></script><script>alert(2)</script>"


@pytest.fixture
def open_page(make_page, tmp_path, visit, two_tones):
    def go(**asked):
        page = make_page(tmp_path / "p", asked.pop("takes", two_tones), **asked.pop("page", {}))
        seen = visit(page, **asked)
        seen.begin()
        return seen

    return go


def test_nothing_sounds_before_the_caution_is_taken(make_page, tmp_path, visit, two_tones):
    seen = visit(make_page(tmp_path, two_tones))
    seen.tab.locator("#ready:not([disabled])").wait_for()
    assert not seen.tab.locator("#bench").is_visible()
    assert "start quietly" in seen.tab.locator("#before").inner_text()
    seen.begin()
    assert seen.tab.locator("#level-db").inner_text() == "-20 dB"


def test_keyboard_only(open_page):
    tab = open_page().tab
    tab.keyboard.press("Space")
    tab.locator("#play", has_text="Stop").wait_for()
    tab.keyboard.press("3")
    assert "Playing: wide 9:00" in tab.locator("#state").inner_text()
    tab.keyboard.press("b")
    assert "Playing: dry, against wide 9:00" in tab.locator("#state").inner_text()
    tab.keyboard.press("n")
    assert "close 9:00" in tab.locator("#state").inner_text()
    tab.keyboard.press("Home")
    tab.keyboard.press("[")
    tab.keyboard.press("ArrowRight")
    tab.keyboard.press("]")
    assert tab.locator("#loop-text").inner_text().startswith("Repeating 0.")
    tab.keyboard.press("l")
    assert tab.locator("#loop-text").inner_text() == "The whole riff, once"
    # Every control can be reached by Tab, and shows it.
    reached = set()
    for _ in range(30):
        tab.keyboard.press("Tab")
        reached.add(tab.evaluate("document.activeElement.id"))
    assert {"seek", "level", "loop-from", "trial-rounds", "trial-start"} <= reached


def test_tracks_and_figures_follow_the_take(open_page):
    tab = open_page().tab
    tab.keyboard.press("2")
    assert tab.locator("#figures").inner_text().count("close 9:00") == 2
    assert "close 9:00 against dry" in tab.locator("#sweep").get_attribute("aria-label")
    assert tab.locator("#sweep").is_visible()


def test_two_different_takes_stay_under_comparison(open_page):
    tab = open_page().tab
    assert "close 9:00, against dry" in tab.locator("#state").inner_text()
    tab.keyboard.press("1")
    assert "dry, against close 9:00" in tab.locator("#state").inner_text()
    tab.get_by_label("set against dry").click()
    assert "dry, against close 9:00" in tab.locator("#state").inner_text()
    assert tab.get_by_label("set against close 9:00").is_checked()
    tab.get_by_label("set against wide 9:00").check()
    assert "dry, against wide 9:00" in tab.locator("#state").inner_text()


def test_choosing_a_take_does_not_move_the_page(open_page):
    tab = open_page(width=360).tab
    tab.evaluate("window.scrollTo(0, 0)")
    for key in "231":
        tab.keyboard.press(key)
        assert tab.evaluate("window.scrollY") == 0


def test_moments_outside_the_stretch_held_are_not_offered(make_page, tmp_path, visit, two_tones):
    pair = PagePair(1, 2, "Plainly different.", (0.2, 1.2, 1.9))
    seen = visit(make_page(tmp_path, two_tones, excerpt_s=(1.0, 1.5), pairs=[pair]))
    seen.begin()
    assert seen.tab.locator("#pair").inner_text() == "Plainly different."
    assert seen.tab.locator("#moments button").all_inner_texts() == ["1.2 s"]


LONG = "a set whose name is a whole sentence and " + "unbroken" * 12


def test_no_sideways_scrolling_on_a_narrow_screen(open_page, two_tones):
    takes = dict(zip(["dry", LONG, "wide 9:00"], two_tones.values(), strict=True))
    for scheme in ("light", "dark"):
        tab = open_page(width=360, scheme=scheme, takes=takes).tab
        assert tab.evaluate("document.documentElement.scrollWidth") <= 360
        tab.locator("#trial-start").click()
        assert tab.evaluate("document.documentElement.scrollWidth") <= 360


RENDER = """async ([texts, rate, frames, moves, loop, throughSilence]) => {
  const { graph } = window.sweepset;
  const context = new OfflineAudioContext(1, frames, rate);
  const buffers = texts.map((samples) => {
    const buffer = context.createBuffer(1, samples.length, rate);
    buffer.getChannelData(0).set(samples);
    return buffer;
  });
  if (loop) loop = graph.wholeFrames(loop, rate);
  if (loop) buffers.forEach((buffer) => graph.blendSeam(buffer, loop));
  const voices = graph.wire(context, buffers, context.destination);
  voices[0].gain.gain.value = 1;
  for (const [voice, when] of moves) graph.choose(voices, voice, when, throughSilence);
  graph.start(voices, 0, 0, loop);
  return Array.from((await context.startRendering()).getChannelData(0));
}"""


def rendered(tab, takes, frames, moves, loop=None, through_silence=False):
    texts = [np.asarray(take, np.float32).tolist() for take in takes]
    return np.array(tab.evaluate(RENDER, [texts, RATE, frames, moves, loop, through_silence]))


def test_a_switch_is_sample_exact_and_gains_sum_to_one(open_page, two_tones):
    # The two takes mixed by exponential gains, written down here: were one of them late by
    # a sample, or the gains not one together, the difference would be far above rounding.
    tab = open_page().tab
    takes = [two_tones["dry"][:24_000], two_tones["wide 9:00"][:24_000]]
    when = 0.25
    out = rendered(tab, takes, 24_000, [[1, when]])
    time_s = np.arange(24_000) / RATE
    left = np.where(time_s < when, 1.0, np.exp(-(time_s - when) / 0.004))
    expected = left * takes[0] + (1.0 - left) * takes[1]
    assert np.abs(out - expected).max() < 2e-5
    same = rendered(tab, [takes[0], takes[0]], 24_000, [[1, when]])
    assert np.abs(same - takes[0]).max() < 1e-6


def high_peak(samples):
    """Peak above 8 kHz, where a click shows and tones do not."""
    sos = signal.butter(8, 8_000, "high", fs=RATE, output="sos")
    return np.abs(signal.sosfilt(sos, samples)[2_000:]).max()


def test_a_switch_does_not_click(open_page):
    # No more than 1 dB over the takes alone.
    tab = open_page().tab
    time_s = np.arange(RATE) / RATE
    generator = np.random.default_rng(4)
    hiss = [signal.sosfilt(signal.butter(2, 6_000, fs=RATE, output="sos"), x)
            for x in generator.normal(0.0, 0.05, (2, RATE))]  # fmt: skip
    tones = [0.4 * np.sin(2 * np.pi * hz * time_s) for hz in (110, 147)]
    takes = [tone + h for tone, h in zip(tones, hiss, strict=True)]
    moves = [[1, 0.3], [0, 0.45], [1, 0.47], [0, 0.8]]
    out = rendered(tab, takes, RATE, moves)
    alone = max(high_peak(take) for take in takes)
    assert high_peak(out) < alone * 10 ** (1 / 20)
    hard = np.where((time_s > 0.3) & (time_s < 0.45), takes[1], takes[0])
    assert high_peak(hard) > 2.0 * alone, "the test would not hear a click"


def test_a_loop_does_not_click_at_its_seam(open_page):
    tab = open_page().tab
    time_s = np.arange(RATE) / RATE
    tone = 0.4 * np.sin(2 * np.pi * 101.3 * time_s)
    loop = {"from": 0.2, "to": 0.5037}
    out = rendered(tab, [tone], 2 * RATE, [], loop)
    quiet = high_peak(tone)
    assert high_peak(out) < 3e-3
    cut = np.concatenate([tone[: round(0.5037 * RATE)], tone[round(0.2 * RATE) :]])
    assert high_peak(cut) > 20 * max(high_peak(out), quiet)
    # Outside the seam the loop is the take itself.
    again = out[round(0.5037 * RATE) : round(0.5037 * RATE) + 5_000]
    np.testing.assert_allclose(again, tone[round(0.2 * RATE) :][:5_000], atol=1e-6)


def test_decoded_takes_are_the_wav_bit_for_bit(make_page, tmp_path, visit, two_tones):
    seen = visit(make_page(tmp_path, two_tones))
    code = """async () => {
      const text = atob(document.getElementById('take-2').textContent.trim());
      const bytes = Uint8Array.from(text, (c) => c.charCodeAt(0));
      const context = new OfflineAudioContext(1, 1, 48000);
      return Array.from((await context.decodeAudioData(bytes.buffer)).getChannelData(0));
    }"""
    # Before the page takes the text away: a second copy of the page, its own script stopped.
    page = tmp_path / "still.html"
    page.write_text(
        (tmp_path / "listen.html").read_text().replace("script-src", "x-src"), encoding="utf-8"
    )
    still = seen.context.new_page()
    still.goto(page.as_uri())
    got = np.array(still.evaluate(code))
    expected = np.rint(two_tones["wide 9:00"] * 2**23) / 2**23
    np.testing.assert_array_equal(got, expected)


def test_binomial_arithmetic_against_scipy_and_the_published_tables(open_page):
    tab = open_page().tab

    def call(name, *numbers):
        return tab.evaluate(
            f"(numbers) => window.sweepset.arithmetic.{name}(...numbers)", list(numbers)
        )

    # g10, g11, g18: exact one-sided, computed; g14: 8 of 10 is NOT significant.
    for k, n, p in ((12, 16, 2517 / 65536), (8, 10, 0.0546875), (14, 20, 0.0576591),
                    (58, 100, 0.0666053), (9, 16, 0.4018097)):  # fmt: skip
        assert call("tail", n, k, 0.5) == pytest.approx(p, rel=1e-5)
    for n in (5, 16, 30, 50):
        for k in range(n + 1):
            for rate in (0.5, 1 / 3, 0.7):
                exact = stats.binom.sf(k - 1, n, rate)
                assert call("tail", n, k, rate) == pytest.approx(exact, rel=1e-10)
    # g12: minimum correct for 5 %, n = 5 to 30; g13: for 1 %, n = 7 to 30.
    five = "5 6 7 7 8 9 9 10 10 11 12 12 13 13 14 15 15 16 16 17 18 18 19 19 20 20"
    one = "7 8 9 10 10 11 12 12 13 14 14 15 15 16 17 17 18 19 19 20 20 21 22 22"
    for level, first, table in ((0.05, 5, five), (0.01, 7, one)):
        for n, k in enumerate(map(int, table.split()), start=first):
            assert call("needed", n, level, 0.5) == k
    # g15: Clopper-Pearson of 12/16; g16: power of 12 of 16.
    assert call("interval", 16, 12, 0.95) == pytest.approx([0.4762, 0.9273], abs=5e-5)
    for rate, power in ((0.6, 0.167), (0.7, 0.450), (0.75, 0.630), (0.8, 0.798), (0.9, 0.983)):
        assert call("tail", 16, 12, rate) == pytest.approx(power, abs=6e-4)
    for n, k in ((16, 0), (16, 16), (50, 31)):
        exact = stats.binomtest(k, n).proportion_ci(0.95, method="exact")
        assert call("interval", n, k, 0.95) == pytest.approx([exact.low, exact.high], abs=1e-9)
    # g17: triangle test, guess rate 1/3 (FAO V7180E, appendix A).
    for n, row in ((6, (5, 5, 6)), (12, (7, 8, 9)), (30, (14, 15, 17)), (60, (26, 27, 30))):
        assert tuple(call("needed", n, level, 1 / 3) for level in (0.1, 0.05, 0.01)) == row


def fixed_draws(seen, bits):
    """Make the browser's random numbers known, as only a test may."""
    seen.context.add_init_script(
        f"crypto.getRandomValues = (array) => {{ array.set({bits}); return array; }};"
    )
    seen.tab.reload()
    seen.begin()


def test_blind_trial_from_start_to_saved_result(open_page, tmp_path):
    seen = open_page()
    bits = [0, 1, 1, 0, 1, 0, 0, 1, 1, 1]
    fixed_draws(seen, bits)
    tab = seen.tab
    tab.locator("#trial-first").select_option("1")
    tab.locator("#trial-second").select_option("2")
    tab.locator("#trial-rounds").fill("10")
    assert "9 or more right of 10" in tab.locator("#trial-rule").inner_text()
    tab.locator("#trial-start").click()
    shown = set()
    for n, bit in enumerate(bits):
        assert f"Round {n + 1} of 10" in tab.locator("#trial-round").inner_text()
        if n == 1:
            # An answer before the hidden take is heard, or a key held down, does not count.
            tab.keyboard.press("f")
            assert "Round 2 of 10. Hear the hidden one first." in (
                tab.locator("#trial-round").inner_text()
            )
            tab.keyboard.press("3")
            tab.evaluate(
                """document.body.dispatchEvent(
                  new KeyboardEvent("keydown", { key: "f", repeat: true, bubbles: true }))"""
            )
            assert tab.locator("#trial-round").inner_text() == "Round 2 of 10."
        tab.keyboard.press("3")
        # Whatever is hidden, the page looks the same but for the round's number.
        body = tab.locator("#bench").evaluate("(bench) => bench.outerHTML")
        shown.add(re.sub(r"Round \d+|[\d.]+ s\b", "", body))
        right = n not in (2, 7)
        tab.keyboard.press("fs"[bit if right else 1 - bit])
    assert len(shown) == 1
    verdict = tab.locator("#trial-verdict").inner_text()
    # g14: 8 of 10 must be told as p = 0.0547, and not as a success.
    assert "8 of 10 right" in verdict
    assert "0.0547" in verdict
    assert "well be luck" in verdict
    # The power of "9 of 10" at a true rate of 0.9, by scipy.
    power = stats.binom.sf(8, 10, 0.9)
    details = tab.locator("#trial-details").inner_text()
    least = stats.binom.sf(8, 10, 0.6)
    assert f"right 60 % of the time reaches 9 of 10 in {100 * least:.1f} % of trials" in details
    assert f"at 90 % in {100 * power:.1f} %" in details
    with tab.expect_download() as waiting:
        tab.locator("#trial-save").click()
    waiting.value.save_as(tmp_path / "result.csv")
    rows = list(csv.reader((tmp_path / "result.csv").read_text().splitlines()))
    figures = {row[0]: row[1] for row in rows if len(row) == 2}
    assert figures["right"] == "8"
    assert float(figures["probability by guessing"]) == pytest.approx(0.0546875)
    assert figures["first take"] == "close 9:00"
    told = float(figures["probability of reaching it at a true rate of 0.9"])
    assert told == pytest.approx(power, rel=1e-9)
    log = [row for row in rows if len(row) == 4][1:]
    assert [row[1] for row in log] == [("first", "second")[bit] for bit in bits]
    assert [row[3] for row in log].count("yes") == 8


def test_a_trial_by_keyboard_alone_from_the_caution_to_the_saved_result(
    make_page, tmp_path, visit, two_tones
):
    seen = visit(make_page(tmp_path / "p", two_tones))
    tab = seen.tab

    def tab_to(name):
        for _ in range(60):
            if tab.evaluate("document.activeElement.id") == name:
                return
            tab.keyboard.press("Tab")
        raise AssertionError(f"{name} is not reached by Tab")

    tab.locator("#ready:not([disabled])").wait_for()
    tab_to("ready")
    tab.keyboard.press("Enter")
    tab_to("trial-rounds")
    tab.keyboard.press("Control+a")
    tab.keyboard.type("6")
    tab_to("trial-start")
    tab.keyboard.press("Enter")
    for n in range(6):
        tab.locator("#trial-round", has_text=f"Round {n + 1} of 6").wait_for()
        tab.keyboard.press("123"[n % 3])
        tab.keyboard.press("3")
        tab.keyboard.press("fs"[n % 2])
    tab_to("trial-save")
    with tab.expect_download() as waiting:
        tab.keyboard.press("Enter")
    waiting.value.save_as(tmp_path / "result.csv")
    rows = list(csv.reader((tmp_path / "result.csv").read_text().splitlines()))
    log = [row for row in rows if len(row) == 4][1:]
    assert [row[2] for row in log] == ["first", "second"] * 3
    assert [row[3] for row in log] == ["yes" if row[1] == row[2] else "no" for row in log]


def test_a_trial_given_up_has_no_result_and_hides_nothing_wrongly(open_page):
    tab = open_page().tab
    tab.locator("#trial-start").click()
    assert not tab.locator("#sweep-part").is_visible()
    assert not tab.locator("#takes").is_visible()
    tab.keyboard.press("f")
    tab.locator("#trial-stop").click()
    assert "has no result" in tab.locator("#trial-fault").inner_text()
    assert not tab.locator("#trial-end").is_visible()
    assert tab.locator("#takes").is_visible()


def test_a_trial_of_one_take_against_itself_or_of_too_few_rounds_is_refused(open_page):
    tab = open_page().tab
    tab.locator("#trial-second").select_option(tab.locator("#trial-first").input_value())
    tab.locator("#trial-start").click()
    assert "two different takes" in tab.locator("#trial-fault").inner_text()
    for rounds in ("4", "51", "7.5"):
        tab.locator("#trial-rounds").fill(rounds)
        tab.locator("#trial-start").click()
        assert "whole number of rounds" in tab.locator("#trial-rule").inner_text()
    assert tab.locator("#trial-set").is_visible()


def test_hidden_draws_are_even_and_unlike(open_page):
    # 4 trials of 50 rounds: 200 fair coins; 100 +/- 40 is missed once in 1e8.
    tab = open_page().tab
    tab.locator("#trial-rounds").fill("50")
    right = []
    for _ in range(4):
        tab.locator("#trial-start").click()
        for _ in range(50):
            tab.keyboard.press("3")
            tab.keyboard.press("f")
        right.append(int(tab.locator("#trial-verdict").inner_text().split()[0]))
        tab.locator("#trial-again").click()
    assert 60 < sum(right) < 140
    assert len(set(right)) > 1


def test_hostile_names_are_text(make_page, tmp_path, visit, two_tones):
    takes = dict(zip([HOSTILE, "=cmd()", 'J"1\\u2028'], two_tones.values(), strict=True))
    seen = visit(make_page(tmp_path, takes, title=HOSTILE))
    seen.begin()
    tab = seen.tab
    assert tab.locator("#title").inner_text() == HOSTILE
    assert HOSTILE in tab.locator("#takes").inner_text()
    assert tab.locator("img").count() == 0
    assert tab.evaluate("window.sweepset.trialText.cell('=1+1')") == "'=1+1"
    assert tab.evaluate("window.sweepset.trialText.cell('a,\"b')") == '"a,""b"'


def test_a_change_to_the_hidden_take_sounds_alike_whichever_it_is(open_page, two_tones):
    # From the first take to the hidden one: what is heard is the one take going and the other
    # coming, with a silence between, under gains that do not depend on which it is.
    tab = open_page().tab
    one, two = two_tones["dry"][:24_000], two_tones["wide 9:00"][:24_000]
    steady = np.full(24_000, 0.5)
    when, silence, tau = 0.2, 0.03, 0.004
    moves = [[2, when]]
    outs = {
        name: rendered(tab, [one, two, hidden], 24_000, moves, through_silence=True)
        for name, hidden in (("first", one), ("second", two))
    }
    level = rendered(tab, [steady, steady, steady], 24_000, moves, through_silence=True) / 0.5
    start, turn = round(when * RATE), round((when + silence) * RATE)
    np.testing.assert_array_equal(outs["first"][:start], outs["second"][:start])
    assert level[turn - 96 : turn].max() < 1e-3  # -60 dB
    time_s = np.arange(24_000) / RATE
    rising = np.where(time_s < when + silence, 0.0, 1.0 - np.exp(-(time_s - when - silence) / tau))
    falling = np.where(time_s < when, 1.0, np.exp(-np.maximum(time_s - when, 0.0) / tau))
    for name, hidden in (("first", one), ("second", two)):
        assert np.abs(outs[name] - falling * one - rising * hidden).max() < 2e-5


def test_changes_in_quick_succession_end_on_the_last_one(open_page):
    tab = open_page().tab
    takes = [np.full(24_000, value) for value in (0.1, 0.2, 0.3)]
    moves = [[1, 0.1], [2, 0.11], [0, 0.12], [2, 0.125]]
    for through_silence in (False, True):
        out = rendered(tab, takes, 24_000, moves, through_silence=through_silence)
        assert np.abs(out[round(0.3 * RATE) :] - 0.3).max() < 1e-4
        assert out.max() < 0.301


# Writes down what the player asks of the browser, as only a test may.
SPY = """
window.asked = [];
for (const [type, name] of [[AudioParam, "setTargetAtTime"], [AudioBufferSourceNode, "start"]]) {
  const real = type.prototype[name];
  type.prototype[name] = function (...numbers) {
    window.asked.push([name, ...numbers]);
    return real.apply(this, numbers);
  };
}
"""


def test_the_player_starts_all_together_and_treats_every_hidden_take_alike(open_page):
    seen = open_page()
    seen.context.add_init_script(SPY)
    fixed_draws(seen, [0, 1, 0, 1, 1])
    tab = seen.tab

    def asked():
        return tab.evaluate("window.asked.splice(0)")

    tab.locator("#trial-rounds").fill("5")
    tab.locator("#trial-start").click()
    asked()
    rounds = []
    for number in range(5):
        tab.keyboard.press("3")
        tab.locator("#play", has_text="Stop").wait_for()
        for key in "123":
            tab.keyboard.press(key)
        entries = asked()
        if number:
            starts = [entry for entry in entries if entry[0] == "start"]
            assert len(starts) == 3
            assert all(start == starts[0] for start in starts)
        # Each target gain and time constant, and whether its gain waits for the silence.
        rounds.append([(e[1], e[3]) for e in entries if e[0] == "setTargetAtTime"])
        tab.keyboard.press("f")
    assert rounds[1] == rounds[2] == rounds[3] == rounds[4]
    assert (1, 0.004) in rounds[1]


@pytest.mark.slow
def test_eight_takes_of_thirty_seconds_open_in_three_seconds(make_page, tmp_path, visit):
    # Issue's figure; measured from opening the file to takes ready.
    generator = np.random.default_rng(2)
    takes = {f"take {n}": generator.normal(0.0, 0.1, 30 * RATE).clip(-0.9, 0.9) for n in range(8)}
    page = make_page(tmp_path, takes)
    took: list[float] = []
    # Other programs may hold the machine for a moment: the best of up to five counts.
    while len(took) < 5 and min(took, default=9.0) >= 3.0:
        start = time.perf_counter()
        seen = visit(page)
        seen.tab.locator("#ready:not([disabled])").wait_for()
        took.append(time.perf_counter() - start)
        seen.context.close()
    print(f"\n{page.stat().st_size / 1e6:.0f} MB ready in {min(took):.2f} s")
    assert min(took) < 3.0


def test_forty_takes_a_short_riff_and_silence(make_page, tmp_path, visit):
    short = {f"take {n}": np.zeros(round(0.2 * RATE)) for n in range(40)}
    seen = visit(make_page(tmp_path, short))
    seen.begin()
    seen.tab.keyboard.press("Space")
    for _ in range(39):
        seen.tab.keyboard.press("n")
    assert "take 39" in seen.tab.locator("#state").inner_text()
    last = seen.tab.locator("#takes button").last.bounding_box()
    shown = seen.tab.locator("#takes").bounding_box()
    assert last["y"] + last["height"] <= shown["y"] + shown["height"] + 1
    seen.tab.locator("#play", has_text="Play").wait_for()  # it came to its end


def test_an_excerpt_is_told(make_page, tmp_path, visit, two_tones):
    seen = visit(make_page(tmp_path, two_tones, excerpt_s=(0.5, 1.5)))
    seen.begin()
    assert "holds 0.5 s to 1.5 s" in seen.tab.locator("#notice").inner_text()
    assert seen.tab.locator("#clock").inner_text() == "0.5 s of 1.5 s"
