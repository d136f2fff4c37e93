"""Pages in headless Chromium: no complaint, nothing fetched, every figure is spoken of, nothing sticks out."""

import json

import browser
import pytest
import report_cases as cases

pytestmark = pytest.mark.skipif(browser.find() is None, reason="there is no Chromium on this machine")

NAMES = ["bent", "many", "apart", "constant", "markup", "stopped", "failing"]
SIZES = [(1280, False), (400, True)]


@pytest.fixture(scope="module")
def pages(tmp_path_factory):
    folder = tmp_path_factory.mktemp("pages")
    bent, density = cases.bent_run()
    bent.report(folder / "bent.html", density=density)
    cases.neck_run().report(folder / "failing.html", density=cases.neck_density())
    for name in ("many", "apart", "constant", "markup", "stopped"):
        getattr(cases, name)().report(folder / f"{name}.html")
    return folder


@pytest.fixture(scope="module")
def tab():
    with browser.opened() as opened:
        yield opened


def test_the_browser_reports_what_pages_do_wrong(tab, tmp_path):
    """The other tests would not fail otherwise."""
    wrong = tmp_path / "wrong.html"
    wrong.write_text("<!doctype html><title>x</title><img src='none.png'><div style='width:3000px'>wide</div>"
                     "<script>console.error('oh')</script>")
    tab.open(wrong, 400)
    assert any("oh" in said for said in tab.said)
    assert any("none.png" in asked for asked in tab.asked)
    assert tab.value("document.documentElement.scrollWidth") > 400


@pytest.mark.parametrize(("width", "dark"), SIZES)
@pytest.mark.parametrize("name", NAMES)
def test_a_page_opens_quietly_and_fits(tab, pages, name, width, dark):
    tab.open(pages / f"{name}.html", width, dark=dark)
    assert tab.said == []
    assert [asked for asked in tab.asked if not asked.startswith("data:")] == [(pages / f"{name}.html").as_uri()]
    assert tab.value("document.documentElement.scrollWidth") <= width
    outside = tab.value(f"""[...document.querySelectorAll('svg.drawing')].filter(s => {{
        const r = s.getBoundingClientRect();
        return r.width > 0 && (r.left < 0 || r.right > {width} || r.height < 40) }}).length""")
    assert outside == 0
    ground = tab.value("getComputedStyle(document.body).backgroundColor")
    assert (ground == "rgb(22, 27, 28)") == dark


@pytest.mark.parametrize("name", NAMES)
def test_every_figure_is_spoken_of(tab, pages, name):
    tab.open(pages / f"{name}.html")
    tab.value("document.querySelectorAll('details').forEach(d => d.open = true)")
    spoken = tab.spoken()
    figures = [node for node in spoken if node["role"] in ("image", "img")]
    assert len(figures) == tab.value("document.querySelectorAll('svg').length")
    assert (len(figures) == 0) == (name == "stopped")
    for node in figures:
        # the name a screen reader gives holds the title and the description of the drawing
        assert len(node["name"]) > 60, node
    headings = [node["name"] for node in spoken if node["role"] == "heading"]
    assert "Where did steps fail, or need halving?" in headings
    assert any(node["role"] == "table" for node in spoken)


def test_text_of_figures_does_not_run_out_of_them(tab, pages):
    for name in ("bent", "failing", "markup", "many"):
        tab.open(pages / f"{name}.html")
        cut = tab.value("""[...document.querySelectorAll('svg.drawing')].flatMap(s => {
            const box = s.getBoundingClientRect();
            return [...s.querySelectorAll('text')].filter(t => { const r = t.getBoundingClientRect();
                return r.width > 0 && (r.left < box.left - 2 || r.right > box.right + 2) })
                .map(t => s.getAttribute('aria-labelledby') + ': ' + t.textContent) })""")
        assert cut == []


def test_names_with_markup_make_no_elements(tab, pages):
    for name in ("markup", "bent"):
        tab.open(pages / f"{name}.html")
        assert tab.value("document.querySelectorAll('script, b, raw').length") == 0
        shown = tab.value("[...document.querySelector('.numbers').querySelectorAll('tbody th')]"
                          ".map(t => t.firstChild.textContent)")
        expected = [" ".join(n.split()) for n in cases.MARKUP[: len(shown)]]
        assert [" ".join(text.split()) for text in shown] == expected
        drawn = tab.value("[...document.querySelectorAll('svg text')].map(t => t.textContent)")
        assert cases.MARKUP[2].startswith("$x^2$")
        assert any(text.startswith("$x^2$") for text in drawn)


def test_tables_that_are_too_wide_scroll_by_themselves_and_by_keyboard(tab, pages):
    tab.open(pages / "markup.html", 400)
    found = json.loads(str(tab.value("""(() => { const w = document.querySelector('.numbers');
        return JSON.stringify([w.scrollWidth > w.clientWidth, w.tabIndex, w.getAttribute('role')]) })()""")))
    assert found == [True, 0, "region"]


def test_a_printed_page_is_light_and_hides_nothing(tab, pages, tmp_path):
    tab.open(pages / "many.html", dark=True, media="print")
    assert tab.value("getComputedStyle(document.body).backgroundColor") == "rgb(252, 250, 245)"
    # what is folded on the screen takes room on paper
    assert tab.value("[...document.querySelectorAll('details svg')].every(s => s.getBoundingClientRect().height > 40)")
    tab.print_to(tmp_path / "page.pdf")
    assert (tmp_path / "page.pdf").read_bytes().startswith(b"%PDF-")
