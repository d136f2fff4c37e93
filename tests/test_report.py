"""The page as text: what it says, in which order, that it needs nothing else, and that its numbers are right."""

import html.parser
import re
import subprocess
import sys
from importlib.resources import files
from pathlib import Path
from xml.etree import ElementTree

import numpy as np
import pytest
import report_cases as cases
from synthetic_chains import autoregression, crawling, frozen

import fellwalk as fw
from fellwalk import report
from fellwalk.errors import ArgumentError, RecordError
from fellwalk.report_advice import REMEDIES, remedies
from fellwalk.report_facts import share_of_user
from fellwalk.verdict import CAUTION, FIT, MORE, NOT_TRUSTED

ORDER = ["reasons", "parameters", "chains", "estimates", "failures", "shape", "cost", "repeat", "limits"]


class Reader(html.parser.HTMLParser):
    """What a browser makes of a page: tags with attributes, and text."""

    def __init__(self, page):
        super().__init__()
        self.tags, self.texts, self.open = [], [], []
        self.feed(page)

    def handle_starttag(self, tag, attributes):
        self.tags.append((tag, dict(attributes)))
        self.open.append(tag)

    def handle_endtag(self, tag):
        while self.open and self.open.pop() != tag:
            pass

    def handle_data(self, data):
        if "style" not in self.open:
            self.texts.append(data)

    @property
    def text(self):
        return " ".join(" ".join(self.texts).split())


@pytest.fixture(scope="module")
def pages():
    bent, density = cases.bent_run()
    return {
        "fit": cases.markup().report(), "apart": cases.apart().report(), "constant": cases.constant().report(),
        "stopped": cases.stopped().report(), "bent": bent.report(density=density),
        "failing": cases.neck_run().report(density=cases.neck_density()),
        "halved": cases.neck_run(6).report(density=cases.neck_density()),
    }


ALL = ["fit", "apart", "constant", "stopped", "bent", "failing", "halved"]


# ---- the page as a whole --------------------------------------------------------------------------------------------


@pytest.mark.parametrize("name", ALL)
def test_sections_stand_in_the_order_of_the_reader_s_questions(pages, name):
    tags = Reader(pages[name]).tags
    assert [attributes["id"] for tag, attributes in tags if tag == "section"] == ORDER
    assert sum(tag == "h1" for tag, _ in tags) == 1


@pytest.mark.parametrize("name", ALL)
def test_nothing_is_fetched_and_nothing_runs(pages, name):
    tags = Reader(pages[name]).tags
    assert {tag for tag, _ in tags} & {"script", "iframe", "object", "embed", "img", "video", "form", "base"} == set()
    for _, attributes in tags:
        assert not [key for key in attributes if key.startswith("on")]
        for key in ("src", "href", "xlink:href", "data", "action"):
            assert attributes.get(key, "#").startswith(("#", "data:")), attributes
    assert "@import" not in pages[name]
    assert re.findall(r"url\((?!#)", pages[name]) == []
    assert "default-src 'none'" in pages[name]


@pytest.mark.parametrize("name", ALL)
def test_every_figure_has_words_and_names_are_unique(pages, name):
    tags = Reader(pages[name]).tags
    ids = [attributes["id"] for _, attributes in tags if "id" in attributes]
    assert len(ids) == len(set(ids))
    used = re.findall(r'(?:url\(#|href="#)([^")]+)', pages[name])
    assert set(used) <= set(ids)
    figures = re.findall(r"<svg.*?</svg>", pages[name], re.DOTALL)
    assert len(figures) == sum(tag == "figure" for tag, _ in tags)
    assert bool(figures) == (name != "stopped")
    for figure in figures:
        root = ElementTree.fromstring(figure)
        title, words = root[0], root[1]
        assert root.attrib["role"] == "img"
        assert root.attrib["aria-labelledby"] == f"{title.attrib['id']} {words.attrib['id']}"
        assert len(title.text) > 8
        assert len(words.text) > 40
        # colours come from the page: no other colour is left
        without_links = re.sub(r"(url\(|href=\")#[^)\"]*", "", figure)
        assert re.findall(r"#[0-9a-fA-F]{6}|#[0-9a-fA-F]{3}\b(?!-)", without_links) == []


def test_names_with_markup_are_text(pages):
    reader = Reader(pages["fit"])
    assert {tag for tag, _ in reader.tags} & {"script", "b"} == set()
    rows = re.findall(r'<tr><th scope="row">(.*?)</th>', pages["fit"])
    assert [html.unescape(row) for row in rows[: len(cases.MARKUP)]] == cases.MARKUP
    assert "{{ 7 * 7 }}" in reader.text
    assert "49" not in [text.strip() for text in reader.texts]
    bent = Reader(pages["bent"])
    assert "<script>alert('x')</script>" in bent.text
    assert {tag for tag, _ in bent.tags} & {"script", "b"} == set()


def test_names_that_cannot_be_printed_are_shown_with_a_sign():
    draws = cases.independent(2, 50, 2)
    failures = [(0, k, 9, draws[0, k] + 3) for k in range(10)]
    page = cases.made(draws, names=["bell\x07", "half \ud800"], failures=failures).report()
    assert "\x07" not in page
    page.encode("utf-8")
    assert "bell\ufffd" in page
    assert "must be a printable string" in page


@pytest.mark.parametrize(("name", "kind", "answer"), [
    ("fit", FIT, "Yes: fit for use"), ("apart", NOT_TRUSTED, "No: not to be trusted"),
    ("bent", MORE, "Not yet: needs more draws"), ("stopped", None, "No verdict yet")])
def test_the_answer_stands_first(pages, name, kind, answer):
    result = {"fit": cases.markup, "apart": cases.apart, "bent": lambda: cases.bent_run()[0],
              "stopped": cases.stopped}[name]()
    assert (result.judgement.verdict.kind if result.judged else None) == kind
    reader = Reader(pages[name])
    assert f"<h1>{answer}</h1>" in pages[name]
    top = reader.text[: reader.text.index("The verdict and its reasons")]
    for question in ("Can I use these draws?", "What would fix them?", "What did they cost?"):
        assert question in top
    if kind is None:
        assert "There are 0 kept draws a chain, too few to judge" in reader.text
        assert "an exception" in top
    else:
        for reason in result.judgement.verdict.reasons:
            assert " ".join(reason.split()) in reader.text
    assert f"{result.spent['gradients']:,.0f} gradients" in top
    assert CAUTION in reader.text


def test_the_table_is_the_printed_one(pages):
    j = cases.apart().judgement
    printed = [line.split() for line in j.table().splitlines() if line.startswith(("one", "two", "three"))]
    rows = re.findall(r"<tr[^>]*><th scope=\"row\">(.*?)</th>(.*?)</tr>", pages["apart"])[:3]
    for line, (name, cells) in zip(printed, rows, strict=True):
        assert re.sub("<.*", "", name).strip() == line[0]
        found = [cell.replace("−", "-") for cell in re.findall("<td>(.*?)</td>", cells)]
        assert found == line[1:]
    assert [("needs attention" in name) for name, _ in rows] == [False, True, False]


def test_a_constant_parameter_is_said(pages):
    text = Reader(pages["constant"]).text
    assert "<td>2.385</td>" in pages["constant"]
    assert text.count("constant") >= 2
    assert "Constant in all 4,000 draws: fixed." in text


def test_300_parameters_and_16_chains():
    page = cases.many().report()
    for name in cases.many().names:
        assert re.search(f'<th scope="row">{re.escape(name)} ?<', page)
    labels = re.findall(r">(x\[\d+\])</text>", page)
    assert set(labels) == set(cases.many().names)
    assert "The other 276 parameters" in page
    assert len(page) < 3e6


# ---- advice ---------------------------------------------------------------------------------------------------------


def reasons_of(draws, **more):
    return fw.judge(draws, **more).verdict.reasons


def test_every_reason_not_to_trust_has_a_remedy():
    rng = np.random.default_rng(8)
    facts = cases.steady_facts(4, 800)
    facts["failure"][:, ::40] = 9
    good = autoregression(rng, 0.3, 800)
    at_end = cases.steady_facts(4, 800)
    at_end["failure"].reshape(-1)[np.argsort(good[:, :, 0].reshape(-1))[:20]] = 9
    x = cases.independent(4, 1000, 2)
    said = {
        "stood still": reasons_of(frozen(0.5)(rng)),
        "kept apart from": cases.apart().judgement.verdict.reasons,
        "far more slowly than the others": reasons_of(crawling()(rng)),
        "Steps failed in": reasons_of(good, facts=facts),
        "failed steps start where": reasons_of(good, facts=at_end),
        "Draws and gradients contradict each other": reasons_of(x, gradients=-1.5 * x),
        "nothing moved": reasons_of(np.ones((4, 100, 2))),
        "There is only one chain": reasons_of(x[:1]),
        "too near the end to be told": reasons_of(x > 100),
    }
    for words, reasons in said.items():
        assert words in REMEDIES
        assert words in " ".join(reasons), (words, reasons)
    assert set(REMEDIES) - set(said) == {"settling may have been too short"}
    drifting = cases.independent(4, 400, 1) + np.linspace(0, 3, 400)[None, :, None]
    assert "settling may have been too short" in " ".join(reasons_of(drifting))


def _failing(chains, n):
    facts = cases.steady_facts(chains, n)
    facts["failure"][:, ::10] = 9
    return facts


def test_what_would_fix_draws_names_the_command_and_its_cost():
    n, slow = 400, autoregression(np.random.default_rng(2), 0.9, 400)
    result = cases.made(slow, path="/tmp/my run.fell")
    needed = result.judgement.verdict.draws_needed
    (step,) = remedies(result, result.judgement)
    assert f"`fellwalk resume '/tmp/my run.fell' --keep {needed}`" in step
    more = (needed / n - 1) * 4 * n * 8
    told = float(re.search(r"about ([\d,]+) gradients more", step)[1].replace(",", ""))
    assert told == pytest.approx(more, rel=0.05)  # two digits are told
    failing = cases.made(cases.independent(4, 100, 2), facts=_failing(4, 100), motion=fw.Leapfrog(halvings=2))
    (step,) = remedies(failing, failing.judgement)
    assert "`acceptance=0.95`" in step
    assert "`halvings=5`" in step
    failing.settings["acceptance"] = 0.96
    assert "`acceptance=0.98`" in remedies(failing, failing.judgement)[0]
    assert remedies(cases.markup(), cases.markup().judgement) == ["Nothing needs to be fixed."]
    assert "Run it again" in remedies(cases.stopped(), None)[0]


def test_the_table_says_what_is_sharpened_and_by_what():
    def log_gamma(x):
        return 2 * x[1] - np.exp(x[1]) - 0.5 * x[0] ** 2, np.array([-x[0], 2 - np.exp(x[1])])

    density = fw.Density(log_gamma, 2, names=["plain", "log"], start=[0.0, 0.0])
    result = fw.run(density, keep=300, seed=4, executor="here", progress="off")
    judgement = result.judgement
    assert judgement.by["estimate"][0] == "linear"
    assert judgement.by["spread"][0] == "quadratic"
    page = result.report()
    tables = re.findall(r"<table>.*?</table>", page)
    sharp, raw = (table for table in tables if ">worth<" in table)
    for i, name in enumerate(result.names):
        row = sharp[sharp.index(f'<th scope="row">{name}') :].partition("</tr>")[0]
        by = {key: words[i] for key, words in judgement.by.items()}
        told = re.search(r'<td class="words">(.*?)</td>', row)[1]
        for kind in {*by.values()} - {"none"}:
            keys = ", ".join(key for key, word in by.items() if word == kind)
            assert told == kind or f"{kind}: {keys}" in told
        assert (told == "") == (set(by.values()) == {"none"})
        assert row.count("*</td>") + row.count("*?</td>") == sum(word != "none" for word in by.values())
    assert "sharpened by" not in raw
    assert "*" not in raw
    assert "The same from the draws alone" in page
    assert "The same from the draws alone" not in cases.markup().report()


# ---- models and costs -----------------------------------------------------------------------------------------------


def test_without_the_model_the_page_says_so():
    result = cases.neck_run()
    assert "A slice of the log density needs the model: the run does not name its model" in result.report()
    named = cases.made(cases.independent(4, 50, 3), model="no_such_module_at_all:density")
    text = Reader(named.report()).text
    assert "the model could not be used (ArgumentError: there is no module 'no_such_module_at_all'" in text
    assert "the model was left out, as asked" in Reader(report.page(named, find=False)).text


def test_another_model_is_not_taken_for_the_run_s():
    other = fw.Density(lambda x: (cases.neck(x)[0] - 0.01 * float(x @ x), cases.neck(x)[1] - 0.02 * x), 3)
    text = Reader(cases.neck_run().report(density=other)).text
    assert "it is another model, or other data" in text
    text = Reader(cases.neck_run().report(density=fw.Density(lambda x: (-0.5 * float(x @ x), -x), 2))).text
    assert "the model has 2 coordinates, the run had 3" in text


def test_a_model_that_raises_does_not_spoil_the_page():
    calls = []

    def failing(x):
        calls.append(x)
        if len(calls) > 3:
            raise ZeroDivisionError("by nothing")
        return cases.neck(x)

    text = Reader(cases.neck_run().report(density=fw.Density(failing, 3))).text
    assert "Not known: the model raised ZeroDivisionError." in text
    assert "A slice could not be drawn (ZeroDivisionError: by nothing)" in text


def test_the_share_of_time_in_the_user_s_code_is_an_evaluation_times_their_number():
    import time

    def slow(x):
        time.sleep(0.002)
        return -0.5 * float(x @ x), -x

    result = cases.made(cases.independent(4, 50, 2))
    share = share_of_user(result, fw.Density(slow, 2), "")
    assert 0.002 <= share.seconds < 0.02  # a sleep never ends early, and on a busy machine late
    assert share.share == pytest.approx(share.seconds * result.spent["gradients"] / result.spent["seconds"])
    assert "An estimate" in share.text


def test_cost_and_settings_are_told(pages):
    text = Reader(pages["failing"]).text
    result = cases.neck_run()
    kept = int(result.facts["gradients"].sum())
    total = int(result.spent["gradients"])
    assert f"{total:,}: {total - kept:,} in settling, {kept:,} for the kept draws" in text
    for word in ("Leapfrog(halvings=0)", "NoUTurn(", "Seed 4", "numpy", "fellwalk 0.", "result = fw.run("):
        assert word in text, word
    call = re.search(r"<pre><code>(.*?)</code>", pages["failing"], re.DOTALL)[1]
    space = {"density": cases.neck_density(), "starts": None, "settle": 150}
    again = html.unescape(call).replace("seed=4,", "seed=4, executor='here', progress='off',")
    exec(again, space)
    np.testing.assert_array_equal(space["result"].draws, result.draws)


# ---- files, notebooks, extras ---------------------------------------------------------------------------------------


def test_writing(tmp_path):
    result, place = cases.stopped(), tmp_path / "page.html"
    assert result.report(place) == place.read_text(encoding="utf-8") == result.report()
    report.write(result, place, replace=False)  # a page may be made anew
    place.write_text("my own notes")
    with pytest.raises(RecordError, match="it is not a page of fellwalk"):
        report.write(result, place, replace=False)
    assert place.read_text() == "my own notes"
    with pytest.raises(RecordError, match="No such file"):
        result.report(tmp_path / "none" / "page.html")


def test_a_notebook_shows_verdict_table_and_cost():
    shown = cases.apart()._repr_html_()
    assert "No: not to be trusted" in shown
    assert shown.count("<tr") == 4
    assert "Cost of the whole run" in shown
    reader = Reader(cases.markup()._repr_html_())
    assert {tag for tag, _ in reader.tags} & {"script", "b"} == set()
    assert "No verdict yet" in cases.stopped()._repr_html_()


def test_without_the_extra_a_notebook_is_served_and_a_page_is_refused_in_a_sentence():
    program = ("import sys; sys.modules['jinja2'] = sys.modules['matplotlib'] = None\n"
               "sys.path.insert(0, sys.argv[1])\nimport report_cases\n"
               "r = report_cases.made(report_cases.independent(2, 50, 2)); r._repr_html_()\n"
               "try:\n    r.report()\nexcept Exception as error:\n    print(type(error).__name__, error)\n")
    done = subprocess.run([sys.executable, "-c", program, str(Path(__file__).parent)], capture_output=True, text=True,
                          check=False, timeout=60)
    assert done.returncode == 0, done.stderr
    assert done.stdout.startswith("ArgumentError a page needs matplotlib and Jinja2")
    assert "pip install 'fellwalk[report]'" in done.stdout


def test_tables_of_other_libraries():
    result = cases.constant()
    pandas, pyarrow = pytest.importorskip("pandas"), pytest.importorskip("pyarrow")
    frame, table = result.to_frame(), result.to_arrow()
    assert isinstance(frame, pandas.DataFrame)
    assert isinstance(table, pyarrow.Table)
    assert list(frame.columns) == table.column_names == ["chain", "draw", "east", "fixed", "north"]
    picked = frame[(frame.chain == 2) & (frame.draw == 7)]
    np.testing.assert_array_equal(picked[["east", "fixed", "north"]].to_numpy()[0], result.draws[2, 7])
    np.testing.assert_array_equal(table["north"].to_numpy(), result.draws[:, :, 2].ravel())
    assert b'"seed": 11' in table.schema.metadata[b"fellwalk"]
    with pytest.raises(ArgumentError, match="a parameter is named 'draw'"):
        cases.made(cases.independent(2, 10, 1), names=["draw"]).to_frame()


# ---- the look -------------------------------------------------------------------------------------------------------


def luminance(colour):
    """Relative luminance of sRGB (WCAG 2.2)."""
    parts = np.array([int(colour[i : i + 2], 16) for i in (1, 3, 5)]) / 255
    linear = np.where(parts <= 0.04045, parts / 12.92, ((parts + 0.055) / 1.055) ** 2.4)
    return float(linear @ [0.2126, 0.7152, 0.0722])


@pytest.mark.parametrize("theme", [0, 1])
def test_text_stands_out_from_its_ground_in_both_themes(theme):
    """Contrast of at least 4.5, as WCAG 2.2 asks for text (success criterion 1.4.3)."""
    style = files("fellwalk").joinpath("templates/report.css").read_text(encoding="utf-8")
    colours = dict(re.findall(r"--(\w+): (#\w{6})", re.findall(r":root \{(.*?)\}", style, re.DOTALL)[theme]))
    assert len(colours) == 12
    for word in ("ink", "muted", "line", "mark", "fit", "more", "stop", "none"):
        for ground in ("paper", "card"):
            light, dark = sorted((luminance(colours[word]), luminance(colours[ground])), reverse=True)
            assert (light + 0.05) / (dark + 0.05) >= 4.5, (word, ground)
