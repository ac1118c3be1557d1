"""The page of a gate in Markdown: what it says, and that no text of a kernel is more than text."""

from gate_reports import HOSTILE, REPORTS, entry, every_state, finding, report
from hypothesis import given
from markdown_it import MarkdownIt

from narrowgauge.policy.summary import summary_text
from narrowgauge.record.printable import clean


def inline(text):
    """Every piece of inline content of a page, by its type, and how many cells each row has."""
    tokens = MarkdownIt("commonmark", {"html": True}).enable(["table", "strikethrough"]).parse(text)
    pieces = [child for token in tokens for child in token.children or ()]
    rows, cells = [], 0
    for token in tokens:
        cells += token.type in ("th_open", "td_open")
        if token.type == "tr_close":
            rows.append(cells)
            cells = 0
    return tokens, pieces, rows


@given(REPORTS)
def test_no_text_makes_a_tag_a_link_or_a_column(made):
    """The page has its own tags and emphasis only, and tables of its own numbers of columns."""
    tokens, pieces, rows = inline(summary_text(made))
    assert {one.content for one in pieces if one.type == "html_inline"} <= {"<code>", "</code>"}
    own = {"text", "html_inline", "strong_open", "strong_close", "text_special"}
    assert {one.type for one in pieces} <= own
    strong = [pieces[number + 1].content for number, one in enumerate(pieces) if one.type == "strong_open"]
    assert set(strong) <= {"fails", "inconclusive"}
    open_gates = [gate for gate in made.gates if any(one.state != "holds" for one in gate.findings)]
    shown = [one for gate in open_gates for one in gate.findings if one.state != "holds"]
    assert sorted(rows) == [4] * (len(open_gates) + len(shown)) + [7] * (1 + len(made.gates))
    assert not any(token.type in ("html_block", "fence", "code_block") for token in tokens)


def test_a_message_reads_as_it_was_written():
    """Entities and all: a reader sees the characters of the message, less control characters."""
    page = summary_text(report(entry(finding("fails", message=HOSTILE))))
    _, pieces, _ = inline(page)
    assert clean(HOSTILE).replace("  ", " ") in "".join(one.content for one in pieces).replace("  ", " ")
    for address in ("http://", "www.z"):
        assert address not in page


def test_it_says_what_does_not_hold_first_and_how_to_renew():
    """The counts of every audit file, then what fails, what is open and what is noted; nothing of what holds."""
    page = summary_text(every_state())
    assert page.startswith("## Precision gate: fail\n")
    assert "| <code>models/bad.toml</code> | <code>reserve.py&#58;value</code> | **fails** | 2 | 1 | 0 | 1 |" in page
    assert "is **inconclusive**, which is no pass" in page
    assert page.index("| fails | gain |") < page.index("| undecided | bias |") < page.index("| note | fingerprint |")
    assert "### <code>models/good.toml</code>" not in page
    assert "<code>narrowgauge policy models/reserve.toml</code>" in page


def test_a_page_stays_below_its_limit():
    """However much a kernel has to say: 300 audit files, each with 300 findings of 8,000 characters."""
    loud = [finding("fails", message="|" * 8000) for _ in range(300)]
    page = summary_text(report(*(entry(*loud, audit=f"{number}{'|' * 500}.toml") for number in range(300))))
    assert len(page.encode("utf-8")) < 2**20
    assert page.endswith("The page ends here, at its limit; the report in JSON has the rest.\n")
    assert "250 further findings are not shown." in summary_text(report(entry(*loud)))


def test_another_class_of_machine_is_named():
    """Bits of exp and log differ between machines: a reader of a failure has to know."""
    page = summary_text(report(entry(finding("fails"), same_machine=False)))
    assert "The policy was drawn up on another class of machine than this one." in page
