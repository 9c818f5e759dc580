"""Page, PDF and text say the same, and what they say are the numbers of the assessment."""

from __future__ import annotations

import re
import shutil
import subprocess

import pytest

from harness.record import Event
from harness.report import assemble
from harness.report.figures.canvas import ON_A_PAGE, ON_PAPER, coloured
from harness.report.figures.drawing import draw_all
from harness.report.html import to_html
from harness.report.pdf import to_pdf
from harness.report.text import WIDTH, to_text

KINDS = (
    "pass",
    "fail",
    "undecided",
    "sequential pass",
    "outages",
    "bursts",
    "measured only",
    "never aligned",
    "nothing came",
    "sweep",
    "resumed sweep",
    "duplex",
    "running",
)


def stated(document: dict) -> list[float]:
    """The numbers that a reader signs for, from the assessment's JSON."""
    found = []
    for d in document.get("points") or [document]:
        found += [d["bits_compared"], d["errors"], d["bits_unaligned"], d["slip_count"]]
        if d["bounds"] and d["bits_compared"]:
            found += [d["ber"], d["bounds"]["lower"], d["bounds"]["upper"]]
        if d["plan"]:
            found += [d["plan"]["longest_bits"], d["plan"]["ber"]]
        if "points" not in document:
            found += [d["bits_received"], d["ones_as_zeros"], d["zeros_as_ones"], d["bits_lost"]]
            found += [d["bits_sent"], *([d["ber_half_wrong"]] if d["ber_half_wrong"] is not None else [])]
            for a in d["availability"]:
                found += [a["seconds"], a["errored"], a["severely_errored"], a["unavailable"]]
            if d["bounds"] and d["bits_compared"]:
                found.append(d["bounds"]["deciding"]["value"])
    if document.get("sensitivity"):
        found += [
            v for v in (document["sensitivity"][k] for k in ("value", "lower", "upper")) if v is not None
        ]
    return found


def holds(number: float, among: list[float], loose: float) -> bool:
    return any(abs(number - other) <= loose * abs(number) for other in among)


@pytest.mark.parametrize("kind", KINDS)
def test_text_and_page_hold_the_numbers_of_the_assessment(cases, parsed, numbers_in, kind):
    material = cases[kind]()
    document = assemble(material)
    page = " ".join(parsed(to_html(document, [""] * len(document.figures()))).parts)
    for text in (to_text(document), page):
        among = numbers_in(text)
        # Six digits of a ratio are written, four of a sensitivity.
        wrong = [n for n in stated(material.assessment.to_json()) if not holds(n, among, 6e-6) and not (
            n in (material.assessment.sensitivity or {}).values() and holds(n, among, 6e-4))]  # fmt: skip
        assert wrong == []
        assert (material.assessment.verdict or "no verdict") in text
        assert material.run.key in text
        assert material.profile_digest in text


@pytest.mark.parametrize("kind", ["pass", "fail", "resumed sweep"])
def test_the_pdf_says_what_the_text_says_with_page_numbers_and_digests_on_every_page(
    cases, numbers_in, kind, tmp_path
):
    if shutil.which("pdftotext") is None:
        pytest.skip("needs pdftotext (poppler)")
    material = cases[kind]()
    document = assemble(material)
    (tmp_path / "r.pdf").write_bytes(to_pdf(document))
    done = subprocess.run(["pdftotext", "-layout", tmp_path / "r.pdf", "-"], capture_output=True, check=True)
    pages = done.stdout.decode().split("\f")[:-1]
    for number, page in enumerate(pages, 1):
        assert f"page {number} of {len(pages)}" in page
        assert material.kept_digest in page
        assert material.profile_digest in page
    text = "\n".join(pages)
    among = numbers_in(text)
    assert [n for n in stated(material.assessment.to_json()) if not holds(n, among, 6e-4)] == []
    words = set(re.findall(r"[A-Za-z]{3,}", to_text(document)))
    missing = words - set(re.findall(r"[A-Za-z]{3,}", text.replace("-\n", "")))
    assert missing <= {"VERDICT"}  # the text's own label


def test_sections_come_in_the_order_in_which_a_reader_asks(cases):
    titles = [s.title for s in assemble(cases["undecided"]()).sections]
    assert titles == [
        "In short", "Unit and order", "Requirement and plan", "Verdict", "Bounds", "Retests", "Pattern and link",
        "Counts", "Availability", "Clustering", "Course of the run", "What deviates", "Cautions", "Signatures",
        "Table of boundaries", "Versions and computer", "Record and profile",
    ]  # fmt: skip
    first = assemble(cases["undecided"]()).sections[0]
    labels = [entry.label for block in first.blocks for entry in getattr(block, "entries", ())]
    assert labels == ["unit", "required", "how sure", "on how many bits", "meanwhile"]


def test_a_sweep_shows_instruments_levels_and_the_sensitivity(cases):
    text = to_text(assemble(cases["sweep"]()))
    for words in (
        "Fictional Works AT-1, serial 7",
        "due 2027-06-30",
        "TC-118",
        "-86.00",
        "never aligned",
        "1e-3 at",
    ):
        assert words in text


def test_the_events_of_a_sweep_leave_out_what_every_point_begins_with(records, point):
    start = 1_788_250_000 * 10**9
    events = [
        Event("instrument", None, "attenuator set to 58 dB, reads 58 dB", start),
        Event("aligned", 0, "the pattern was found", start),
        Event("delay", 0, "loop delay 0 bits", start),
        Event("alignment_lost", 700, "the pattern was lost", start),
        Event("aligned", 900, "the pattern was found again", start),
    ]
    settings = {"sweep": {"instrument": "attenuator"}}
    points = [point([1, 2], {"attenuator": v}, {}, events, "bits") for v in (58.0, 60.0)]
    text = to_text(assemble(records.make(points, command="sweep", settings=settings)))
    course = text[text.index("── Course") : text.index("── What deviates")]
    assert course.count("the pattern was found again") == course.count("the pattern was lost") == 2
    assert "set to 58" not in course
    assert "loop delay 0" not in course
    assert "what every point begins with is left out" in course
    plain = to_text(assemble(records.make([point([1, 2], {}, {}, events, "bits")])))
    assert "loop delay 0 bits" in plain


def test_both_directions_are_told_apart(cases):
    text = to_text(assemble(cases["duplex"]()))
    assert re.search(r"forward direction +reverse direction", text)
    assert re.search(r"errors +6 +7", text)


def test_a_page_asks_nothing_of_anybody_and_runs_nothing(cases, parsed):
    page = to_html(assemble(cases["bursts"]()))
    words = parsed(page)
    assert {tag for tag, _a in words.tags} & {
        "script",
        "link",
        "img",
        "iframe",
        "object",
        "embed",
        "base",
    } == set()
    for _tag, attributes in words.tags:
        for name, value in attributes.items():
            assert not name.startswith("on")
            if name in ("src", "href", "xlink:href", "action", "data", "srcset"):
                assert (value or "").startswith("#")
    for address in re.findall(r"url\(([^)]*)\)", page):
        assert address.startswith("#")
    assert "@import" not in page
    assert set(re.findall(r"https?://[^\"' <]*", page)) <= {
        "http://www.w3.org/2000/svg",
        "http://www.w3.org/1999/xlink",
    }
    assert "default-src 'none'" in page


def test_every_figure_has_its_colours_and_identifiers_of_its_own(cases):
    for kind in ("bursts", "outages", "sweep"):
        figures = assemble(cases[kind]()).figures()
        drawn = draw_all(figures)
        assert figures
        identifiers: list[str] = []
        for svg in drawn:
            for colours in (ON_A_PAGE, ON_PAPER):
                assert not re.search(r"#01020\d", coloured(svg, colours))
            own = re.findall(r'\bid="([^"]*)"', svg)
            assert set(re.findall(r"(?:href=\"|url\()#([^\")]*)", svg)) <= set(own)
            identifiers += own
        assert len(identifiers) == len(set(identifiers))


@pytest.mark.parametrize("kind", [k for k in KINDS if k not in ("pass", "sweep", "measured only")])
def test_every_kind_of_run_becomes_a_page_and_a_pdf(cases, kind):
    document = assemble(cases[kind]())
    drawn = draw_all(document.figures())
    assert to_html(document, drawn).count("<svg") == len(drawn)
    assert to_pdf(document, drawn).startswith(b"%PDF-")


def test_letter_paper_is_letter(cases):
    made = to_pdf(assemble(cases["pass"]()), paper="us-letter")
    if shutil.which("pdfinfo") is None:
        pytest.skip("needs pdfinfo (poppler)")
    said = subprocess.run(["pdfinfo", "-"], input=made, capture_output=True, check=True).stdout.decode()
    assert "612 x 792" in said


def test_no_line_of_text_is_wider_than_promised(cases):
    document = assemble(cases["resumed sweep"]())
    assert max(len(line) for line in to_text(document).splitlines()) <= WIDTH
