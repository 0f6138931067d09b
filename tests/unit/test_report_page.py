"""The page itself: whole without a network, readable without eyes, on any paper."""

from __future__ import annotations

import doctest
import re
from html.parser import HTMLParser
from urllib.parse import unquote

import matplotlib as mpl
import numpy as np
import pytest

from spectral.reporting import panels, reason_map, wording
from spectral.reporting.drawing import FULL_WIDTH_INCHES, Sheet, page_style
from spectral.reporting.page import SAFETY, KeyFigure, Page, Section, Table
from spectral.reporting.palette import (
    NO_VALUE,
    REASON_COLOURS,
    SOUND,
    amount_scale,
    dark_variables,
    error_scale,
    rank_colours,
    signed_scale,
)


class Tags(HTMLParser):
    """Collects every tag with its attributes, and checks that they are nested."""

    def __init__(self, text: str) -> None:
        super().__init__()
        self.tags: list[tuple[str, dict[str, str | None]]] = []
        self.open: list[str] = []
        self.feed(text)
        assert self.open == []

    def handle_starttag(self, tag: str, attrs: list[tuple[str, str | None]]) -> None:
        self.tags.append((tag, dict(attrs)))
        if tag not in {"meta", "img", "br"}:
            self.open.append(tag)

    def handle_endtag(self, tag: str) -> None:
        assert self.open.pop() == tag

    def named(self, tag: str) -> list[dict[str, str | None]]:
        return [attrs for name, attrs in self.tags if name == tag]


def picture_of_a_map(image: np.ndarray[tuple[int, ...], np.dtype[np.float64]]) -> str:
    with page_style():
        sheet = Sheet(2.0, width=3.0)
        panels.draw_map(
            sheet.axes[0],
            image,
            scale=amount_scale(),
            limits=panels.robust_limits(image),
            label="g/cm2",
            title="a map",
        )
        picture = sheet.picture(alt="a 'quoted' <map>", caption="what it is")
    assert picture.uri.startswith("data:image/svg+xml,")
    return unquote(picture.uri)


@pytest.fixture(scope="module")
def page() -> Page:
    with page_style():
        sheet = Sheet(2.0, width=3.0)
        sheet.axes[0].plot([0.0, 1.0], [0.0, 1.0], color=rank_colours(3)[0])
        picture = sheet.picture(alt='a "line" & more', caption="it <rises>")
    return Page(
        kind="Test",
        title="a <b> & c",
        said=("One & all.",),
        look=("Mind the <gap>.",),
        figures=(KeyFigure(name="n", text="1 ± 2", remark="r", value=1.0),),
        sections=(
            Section(
                title="Numbers & more",
                parts=[
                    "A paragraph.",
                    picture,
                    Table(
                        caption="cap",
                        header=("a", "b", "c"),
                        rows=[("1", "two", "3")],
                        words=frozenset({1}),
                        swatches=["#123456"],
                    ),
                ],
            ),
        ),
        assumed=("it is so",),
        record=(("file", "x.h5"), ("nothing", "")),
    )


def test_nothing_is_fetched_from_outside(page: Page) -> None:
    text = page.html()
    assert "://" not in text
    assert "url(" not in text.replace("url(#", "").replace("url(%23", "")
    tags = Tags(text)
    assert not tags.named("script")
    assert not tags.named("link")
    for attrs in tags.named("img"):
        assert str(attrs["src"]).startswith("data:")
    for attrs in tags.named("a"):
        assert str(attrs["href"]).startswith("#")


def test_the_page_can_be_read_without_eyes(page: Page) -> None:
    tags = Tags(page.html())
    assert tags.named("html")[0]["lang"] == "en"
    assert [a["alt"] for a in tags.named("img")] == ['a "line" & more']
    assert len(tags.named("h1")) == 1
    assert len(tags.named("caption")) == len(tags.named("table")) == 1
    assert [a["scope"] for a in tags.named("th")] == ["col"] * 3 + ["row"]
    targets = {a["id"] for _, a in tags.tags if "id" in a}
    assert {str(a["href"])[1:] for a in tags.named("a")} <= targets
    assert "main" in dict(tags.tags)
    # a region that scrolls can be reached by the keyboard
    scrolling = [a for a in tags.named("div") if "scroll" in str(a.get("class"))]
    assert all(a["tabindex"] == "0" for a in scrolling)


def test_texts_are_escaped_and_the_foot_is_there(page: Page) -> None:
    text = page.html()
    for words in (
        "a &lt;b&gt; &amp; c",
        "Mind the &lt;gap&gt;.",
        "it &lt;rises&gt;",
        'class="n">3</td>',
        "<td>two</td>",
        "background:#123456",
        "it is so",
    ):
        assert words in text
    assert SAFETY in text
    assert "not a medical device" in SAFETY
    assert "no decision to accept or reject" in SAFETY
    assert "radiation-protection rules" in SAFETY
    assert "nothing:" not in text


def test_light_dark_and_paper_have_their_rules(page: Page) -> None:
    text = page.html()
    assert "color-scheme:light dark" in text
    assert "@media (prefers-color-scheme:dark)" in text
    assert "@media print" in text
    (source,) = (str(a["src"]) for a in Tags(text).named("img"))
    svg = unquote(source)
    line = rank_colours(3)[0]
    name, dark = dark_variables()[line]
    assert f"stroke: var({name},{line})" in svg
    assert f"{name}:{dark}" in svg.split("</style>")[0]


def test_colours_of_a_scale_do_not_change_with_the_paper() -> None:
    """A map must look the same everywhere: its colours are no theme colours."""
    changing = set(dark_variables())
    for scale in (amount_scale(), error_scale(), signed_scale()):
        table = {mpl.colors.to_hex(scale(v)) for v in np.linspace(0.0, 1.0, 256)}
        assert not table & changing
    assert not {NO_VALUE, SOUND, *REASON_COLOURS} & changing


def lightness(
    scale: mpl.colors.Colormap,
) -> np.ndarray[tuple[int], np.dtype[np.float64]]:
    """CIE 1976 L* along a colour scale, from sRGB (IEC 61966-2-1, D65)."""
    rgb = np.asarray(scale(np.linspace(0.0, 1.0, 201)))[:, :3]
    linear = np.where(rgb <= 0.04045, rgb / 12.92, ((rgb + 0.055) / 1.055) ** 2.4)
    luminance = linear @ [0.2126, 0.7152, 0.0722]
    cube = np.cbrt(luminance)
    return np.asarray(
        np.where(luminance > 216 / 24389, 116 * cube - 16, luminance * 24389 / 27)
    )


@pytest.mark.parametrize("scale", [amount_scale(), error_scale()])
def test_lightness_rises_evenly(scale: mpl.colors.Colormap) -> None:
    values = lightness(scale)
    steps = np.diff(values)
    assert steps.min() > 0.0
    straight = np.linspace(values[0], values[-1], values.size)
    assert np.abs(values - straight).max() < 4.0


def test_the_signed_scale_is_even_on_both_sides() -> None:
    values = lightness(signed_scale())
    middle = values.size // 2
    assert int(values.argmin()) == middle
    assert np.abs(values - values[::-1]).max() < 6.0
    assert np.diff(values[middle:]).min() > 0.0


def test_a_map_is_embedded_once_per_pixel() -> None:
    image = np.arange(12.0).reshape(3, 4)
    image[1, 1] = np.nan
    svg = picture_of_a_map(image)
    assert 'width="4" height="3"' in svg
    assert "pixelated" in svg
    assert "no value" in svg
    assert "no value" not in picture_of_a_map(np.ones((3, 4)))
    assert "http" not in svg.replace("http://www.w3.org/2000/svg", "")


def test_limits_leave_out_the_extremes() -> None:
    values = np.concatenate([np.linspace(0.0, 100.0, 10_001), [1e9, np.nan]])
    limits = panels.robust_limits(values)
    assert limits.low == pytest.approx(1.0, abs=0.02)
    assert limits.high == pytest.approx(99.0, abs=0.02)
    assert panels.signed_limits(-values).low == -panels.signed_limits(values).high
    flat = panels.robust_limits(np.full(5, 3.0))
    assert flat.low < 3.0 < flat.high
    dark = np.zeros(500)
    dark[3:5] = 0.4, 7000.0  # counts in the dark of two pixels: both are to be seen
    dim = panels.robust_limits(dark)
    assert (dim.low, dim.high) == (0.0, 0.4)
    assert panels.robust_limits(np.zeros(5)) == panels.Limits(0.0, 1.0)
    nothing = panels.robust_limits(np.full(3, np.nan))
    assert (nothing.low, nothing.high) == (0.0, 1.0)
    assert panels.signed_limits(np.zeros(3)).high == 1.0


def test_large_images_are_shown_in_blocks() -> None:
    assert panels.block_size((192, 192)) == 1
    assert panels.block_note((192, 192)) == ""
    assert panels.block_size((1, 30_000)) == 1
    shape = (400, 300)
    assert panels.block_size(shape) == 2
    assert "2 by 2 pixels" in panels.block_note(shape)
    assert "2 by 2 pixels" in reason_map.rarest_note(shape)
    image = np.add.outer(np.arange(400.0) // 2 * 1000, np.arange(300.0) // 2)
    image[0, 0] = np.nan
    image[2:4, 0:2] = np.nan
    shown = panels.block_median(image)
    assert shown.shape == (200, 150)
    assert shown[0, 0] == 0.0
    assert np.isnan(shown[1, 0])
    assert shown[7, 11] == 7011.0


def test_the_rarest_reason_is_seen() -> None:
    reasons = tuple(
        reason_map.Reason(bit=b, name=f"n{b}", meaning="m") for b in (1, 2, 4)
    )
    flags = np.zeros((6, 8), np.uint16)
    flags[0] = 1
    flags[0, 0] = 3
    with page_style():
        sheet = Sheet(2.0, width=4.0)
        legend = reason_map.draw_reasons(sheet.axes[0], flags, reasons, title="t")
    words = [text.get_text() for text in legend.get_texts()]
    assert words == ["sound (40)", "n1 (8)", "n2 (1)"]
    (image,) = sheet.axes[0].get_images()
    shown = np.asarray(image.get_array())
    assert shown[0, 0] == 2
    assert (shown[0, 1:] == 1).all()
    assert (shown[1:] == 0).all()
    large = np.zeros((800, 800), np.uint16)
    large[:, ::2] = 1
    large[11, 11] = 4
    with page_style():
        sheet = Sheet(2.0, width=4.0)
        reason_map.draw_reasons(sheet.axes[0], large, reasons, title="t")
    shown = np.asarray(sheet.axes[0].get_images()[0].get_array())
    size = panels.block_size(large.shape)
    assert np.argwhere(shown == 2).tolist() == [[11 // size, 11 // size]]


def test_the_callers_style_comes_back() -> None:
    before = dict(mpl.rcParams)
    with page_style():
        assert mpl.rcParams["svg.fonttype"] == "none"
    assert dict(mpl.rcParams) == before


def test_one_axes_fills_the_page() -> None:
    picture = Sheet(2.0).picture(alt="a", caption="c")
    assert picture.width == round(96 * FULL_WIDTH_INCHES)
    assert picture.height == 192


def test_words_of_numbers() -> None:
    failures, tried = doctest.testmod(wording)
    assert failures == 0
    assert tried > 5


@pytest.mark.parametrize(
    ("value", "text"),
    [
        (0.0, "0"),
        (999.96, "1000"),
        (0.99996, "1.00"),
        (-0.001234, f"{wording.MINUS}0.00123"),
        (1.5e8, "1.50 × 10⁸"),  # noqa: RUF001
        (2e-7, "2.00 × 10⁻⁷"),  # noqa: RUF001
        (-1e-12, f"{wording.MINUS}1.00 × 10⁻¹²"),  # noqa: RUF001
    ],
)
def test_numbers_at_the_edges(value: float, text: str) -> None:
    assert re.sub(wording.NARROW_SPACE, " ", wording.number(value)) == text


def test_errors_decide_the_places() -> None:
    assert wording.with_error(12.3456, 0.996) == "12.3 ± 1.0"
    assert wording.with_error(-0.004, 0.02) == f"{wording.MINUS}0.004 ± 0.020"
    assert wording.with_error(-0.0001, 0.02) == "0.000 ± 0.020"
    assert wording.with_error(1.0, float("nan")) == "1.00"
    assert wording.with_error(1234.5, 67.8) == "1234 ± 68"
    assert wording.fixed(2.0, 1, sign=True) == "+2.0"
    assert wording.number(float("inf")) == wording.NONE
