"""The quality page in a real browser: nothing asked for from elsewhere, usable by keyboard, readable by everybody."""

import os
import shutil
from itertools import pairwise

import pytest

from published_run import NASTY_ID, publish
from starkiln.report.page import build_page

CHROMIUM = os.environ.get("STARKILN_CHROMIUM") or shutil.which("chromium")
if CHROMIUM is None:
    pytest.skip("no chromium: install it, or set STARKILN_CHROMIUM", allow_module_level=True)
playwright_api = pytest.importorskip("playwright.sync_api")

WIDE, NARROW = {"width": 1280, "height": 900}, {"width": 360, "height": 780}
PAPER = {"width": 700, "height": 1000}  # A4 less its margins, in CSS pixels
LEAST_CONTRAST = 4.5  # WCAG 2.2, success criterion 1.4.3
FLAGS = "table:has-text('Flags of the catalogue')"
WORST = "table:has-text('Largest residual')"

CONTRASTS = """
() => {
  const canvas = document.createElement("canvas").getContext("2d", { willReadFrequently: true });
  const rgba = (colour) => {
    canvas.clearRect(0, 0, 1, 1);
    canvas.fillStyle = colour;
    canvas.fillRect(0, 0, 1, 1);
    return [...canvas.getImageData(0, 0, 1, 1).data];
  };
  const luminance = (colour) => {
    const [r, g, b] = colour.slice(0, 3).map((part) => {
      const share = part / 255;
      return share <= 0.04045 ? share / 12.92 : ((share + 0.055) / 1.055) ** 2.4;
    });
    return 0.2126 * r + 0.7152 * g + 0.0722 * b;
  };
  const ground = (element) => {
    for (let each = element; each; each = each.parentElement) {
      const colour = rgba(getComputedStyle(each).backgroundColor);
      if (colour[3] === 255) return colour;
    }
    return [255, 255, 255, 255];
  };
  const plate = [12, 18, 32, 255];
  const found = [];
  for (const element of document.body.querySelectorAll("*")) {
    const own = [...element.childNodes].some((node) => node.nodeType === 3 && node.data.trim());
    if (!own || !element.checkVisibility() || element.closest(".strip, script, style, title, .skip")) continue;
    const style = getComputedStyle(element);
    const inFigure = element.closest("svg") !== null;
    const colour = rgba(inFigure ? style.fill : style.color);
    const onPlate = inFigure && element.textContent.includes("R☉") && element.closest("figure").dataset.plate === "yes";
    const pair = [luminance(colour), luminance(onPlate ? plate : ground(element))].sort((a, b) => b - a);
    found.push([element.tagName, element.textContent.trim().slice(0, 40), (pair[0] + 0.05) / (pair[1] + 0.05)]);
  }
  return found;
}
"""


@pytest.fixture(scope="session")
def browser():
    with playwright_api.sync_playwright() as playwright:
        arguments = ["--no-sandbox", "--disable-gpu", "--disable-background-networking"]
        browser = playwright.chromium.launch(executable_path=CHROMIUM, args=arguments)
        yield browser
        browser.close()


@pytest.fixture(scope="session")
def address(tmp_path_factory):
    run_dir = tmp_path_factory.mktemp("browser") / "run"
    publish(run_dir, rows=300)
    return build_page(run_dir).resolve().as_uri()


@pytest.fixture
def open_page(browser, address):
    """Open the page; at the end, nothing may have been asked for from elsewhere, and no error said."""
    pages, asked, said = [], [], []

    def watch(route):
        asked.append(route.request.url)
        if route.request.url.startswith(("file:", "data:")):
            route.continue_()
        else:
            route.abort()

    def open_it(viewport=WIDE, fragment="", **options):
        page = browser.new_page(viewport=viewport, **options)
        pages.append(page)
        page.route("**/*", watch)
        page.on("console", lambda message: said.append(message.text))
        page.on("pageerror", lambda error: said.append(str(error)))
        page.goto(address + fragment)
        return page

    yield open_it
    for page in pages:
        page.close()
    assert not [url for url in asked if url.split("#")[0] != address and not url.startswith("data:")]
    assert not said


def first_cells(page, table, rows=3):
    return [text.strip() for text in page.locator(f"{table} tbody tr:visible th").all_inner_texts()[:rows]]


def test_it_opens_without_a_word_and_asks_for_nothing(open_page):
    page = open_page()
    assert page.title() == "<b>tamarin</b>: quality of the catalogue"
    assert page.locator("h1").inner_text() == "<b>tamarin</b>"


def test_an_id_that_is_markup_is_shown_as_it_is(open_page):
    page = open_page()
    assert page.locator(f"{WORST} tbody th").first.inner_text() == NASTY_ID


def test_tables_are_sorted_by_keyboard(open_page):
    page = open_page()
    button = page.locator(f"{FLAGS} thead button", has_text="Flag").first
    button.focus()
    page.keyboard.press("Enter")
    header = page.locator(f"{FLAGS} thead th").first
    assert header.get_attribute("aria-sort") == "ascending"
    assert first_cells(page, FLAGS) == ["band_outlier", "blackbody_chosen", "distance_at_bound"]
    page.keyboard.press("Space")
    assert header.get_attribute("aria-sort") == "descending"
    assert first_cells(page, FLAGS) == ["ultraviolet_excess", "temperature_at_bound", "several_modes"]


def test_numbers_are_sorted_as_numbers_by_mouse(open_page):
    page = open_page()
    page.locator(f"{WORST} thead button", has_text="T [K]").click()
    cells = page.locator(f"{WORST} tbody td:nth-child(3)")
    values = [float(cell.get_attribute("data-value")) for cell in cells.all()]
    assert len(values) > 1
    assert values == sorted(values, reverse=True)
    page.locator(f"{WORST} thead button", has_text="Score").click()
    assert page.locator(f"{WORST} thead th[aria-sort]").count() == 1


def test_tables_are_filtered_by_keyboard(open_page):
    page = open_page()
    field = page.get_by_label("Filter the flags")
    field.focus()
    page.keyboard.type("bound luminosity")
    assert page.locator(f"{FLAGS} tbody tr:visible").count() == 0
    assert page.locator("output").first.inner_text() == "0 of 19 rows"
    page.keyboard.press("Control+A")
    page.keyboard.type("_at_bound")
    assert page.locator(f"{FLAGS} tbody tr:visible").count() == 4
    page.keyboard.press("Control+A")
    page.keyboard.press("Delete")
    assert page.locator(f"{FLAGS} tbody tr:visible").count() == 19


def test_the_keyboard_reaches_the_answers_first(open_page):
    page = open_page()
    page.keyboard.press("Tab")
    assert page.evaluate("document.activeElement.textContent") == "Skip to the answers"
    page.keyboard.press("Enter")
    assert page.evaluate("location.hash") == "#job"


def test_a_link_into_folded_pictures_unfolds_them(open_page):
    page = open_page()
    link = page.locator(f"{WORST} tbody a").nth(8)
    target = link.get_attribute("href").removeprefix("#")
    assert not page.locator(f"[id={target}]").is_visible()
    link.click()
    assert page.locator(f"[id={target}]").is_visible()


def test_every_figure_has_a_text_alternative_with_numbers(open_page):
    page = open_page()
    figures = page.locator("figure").all()
    assert len(figures) > 20
    for figure in figures:
        image = figure.locator("[role=img]")
        assert image.count() == 1
        label = image.get_attribute("aria-label")
        assert len(label) > 30
        assert any(character.isdigit() for character in label)
        assert figure.locator("figcaption").text_content().strip()
    assert page.locator("svg:not([aria-hidden=true])").count() == 0
    assert page.locator("img:not([alt])").count() == 0


def test_language_headings_labels_and_table_headers(open_page):
    page = open_page()
    assert page.evaluate("document.documentElement.lang") == "en"
    levels = page.evaluate("[...document.querySelectorAll('h1,h2,h3,h4,h5,h6')].map((h) => Number(h.tagName[1]))")
    assert levels.count(1) == 1
    assert all(later - earlier <= 1 for earlier, later in pairwise(levels))
    assert page.locator("th:not([scope])").count() == 0
    assert page.locator("table:not(:has(caption))").count() == 0
    assert page.evaluate("[...document.querySelectorAll('input')].every((input) => input.labels.length === 1)")
    names = page.evaluate(
        "[...document.querySelectorAll('button, a, summary, [role=region], nav')]"
        ".map((each) => (each.getAttribute('aria-label') || each.textContent).trim())"
    )
    assert all(names)
    ids = page.evaluate("[...document.querySelectorAll('[id]')].map((each) => each.id)")
    assert len(ids) == len(set(ids))
    assert page.locator("main").count() == page.locator("header").count() == 1


@pytest.mark.parametrize("scheme", ["light", "dark"])
def test_all_text_stands_out_from_its_ground(open_page, scheme):
    page = open_page(color_scheme=scheme)
    page.evaluate("document.querySelectorAll('details').forEach((details) => (details.open = true))")
    found = page.evaluate(CONTRASTS)
    assert len(found) > 400
    assert {tag for tag, _, _ in found} >= {"text", "TD", "BUTTON", "FIGCAPTION"}
    faint = [(tag, text, round(ratio, 2)) for tag, text, ratio in found if ratio < LEAST_CONTRAST]
    assert not faint


def test_dark_is_dark(open_page):
    light, dark = (open_page(color_scheme=scheme) for scheme in ("light", "dark"))
    grounds = [page.evaluate("getComputedStyle(document.body).backgroundColor") for page in (light, dark)]
    assert grounds == ["rgb(246, 243, 238)", "rgb(17, 21, 27)"]


@pytest.mark.parametrize("viewport", [NARROW, WIDE], ids=["narrow", "wide"])
def test_nothing_scrolls_sideways(open_page, viewport):
    page = open_page(viewport)
    page.evaluate("document.querySelectorAll('details').forEach((details) => (details.open = true))")
    assert page.evaluate("document.documentElement.scrollWidth") == viewport["width"]


def test_what_scrolls_inside_is_reached_by_keyboard(open_page):
    page = open_page(NARROW)
    hidden = page.evaluate(
        "[...document.querySelectorAll('*')].filter((each) => each.scrollWidth > each.clientWidth + 1"
        " && ['auto', 'scroll'].includes(getComputedStyle(each).overflowX) && each.tabIndex < 0).length"
    )
    assert hidden == 0


def test_print_shows_the_pictures_and_no_controls(open_page):
    page = open_page(PAPER)
    page.emulate_media(media="print")
    assert page.evaluate("document.documentElement.scrollWidth") == PAPER["width"]
    assert page.locator(".filter").first.is_hidden()
    assert page.locator("nav").is_hidden()
    page.evaluate("dispatchEvent(new Event('beforeprint'))")
    assert page.locator("details:not([open])").count() == 0


def test_without_scripts_all_is_there_to_read(open_page):
    page = open_page(java_script_enabled=False)
    assert page.locator("button, input").count() == 0
    assert page.locator(f"{FLAGS} tbody tr").count() == 19
