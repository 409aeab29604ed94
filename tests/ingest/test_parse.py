"""Bytes to columns of text: both parsers against the csv module, and every broken form."""

from __future__ import annotations

import csv
import io
from dataclasses import replace

import pytest
from hypothesis import given, settings
from hypothesis import strategies as st

from ingest import exact, fast, parse
from ingest.report import Refused
from ingest.sheet import Sheet

FORM = parse.TextFormat(max_field_characters=64)


def read(data: bytes | str, form: parse.TextFormat = FORM, plain: tuple[str, ...] = ()) -> Sheet:
    text = parse.decode(data.encode() if isinstance(data, str) else data, form.encoding)
    return parse.parse(text, parse.read_header(text, form), form, plain)


def table(sheet: Sheet) -> list[tuple[int, ...]]:
    columns = [[c.at(i) for i in range(sheet.n_rows)] for c in sheet.columns.values()]
    return list(zip(sheet.lines.tolist(), *columns, strict=True))


def refusal(data: bytes | str, form: parse.TextFormat = FORM) -> Refused:
    with pytest.raises(Refused) as caught:
        read(data, form)
    return caught.value


@pytest.mark.parametrize("end", ["\n", "\r\n", "\r"])
@pytest.mark.parametrize("bom", [b"", b"\xef\xbb\xbf"])
def test_line_ends_and_byte_order_mark(end: str, bom: bytes) -> None:
    data = bom + end.join(["a,b", "1,2", " 3 ,4"]).encode()
    assert table(read(data)) == [(2, "1", "2"), (3, "3", "4")]
    assert table(read(data + end.encode() * 3)) == [(2, "1", "2"), (3, "3", "4")]


def test_quotes_and_line_numbers() -> None:
    data = 'a,b\n"x, ""y""",1\n"two\nlines",2\n\nlast,3\n'
    assert table(read(data)) == [(2, 'x, "y"', "1"), (3, "two\nlines", "2"), (6, "last", "3")]


def test_ragged_rows_are_told_with_their_line() -> None:
    sheet = read("a,b\n1,2\n3\n4,5,6\n\n7,8\n")
    assert table(sheet) == [(2, "1", "2"), (6, "7", "8")]
    assert [(r.line, r.value) for r in sheet.reasons] == [(3, "3"), (4, "4,5,6")]
    assert "has 3 fields where the header has 2" in sheet.reasons[1].reason
    assert sheet.n_rejected == 2


def test_a_stray_quote_costs_one_row() -> None:
    rows = [f"{i},{i}" for i in range(20)]
    rows[3] = '"3,3'
    sheet = read("a,b\n" + "\n".join(rows) + "\n")
    assert [(r.line,) for r in sheet.reasons] == [(5,)]
    assert [row[1] for row in table(sheet)] == [str(i) for i in range(20) if i != 3]
    assert [row[0] for row in table(sheet)] == [i + 2 for i in range(20) if i != 3]


def test_a_quote_open_at_the_end() -> None:
    sheet = read('a,b\n1,2\n3,"4\n5,6')
    assert table(sheet) == [(2, "1", "2"), (4, "5", "6")]
    assert "never closed" in sheet.reasons[0].reason
    assert read('a,b\n1,2\n3,"4').reasons[0].line == 3


def test_nul_and_bytes_of_another_encoding_cost_their_rows() -> None:
    sheet = read(b"a,b\n1,2\n3,\x004\n5,6 \xb5m\n7,8\n")
    assert table(sheet) == [(2, "1", "2"), (5, "7", "8")]
    assert [(r.line, r.column) for r in sheet.reasons] == [(3, "b"), (4, "b")]
    assert "NUL" in sheet.reasons[0].reason
    assert "encoding" in sheet.reasons[1].reason


def test_a_replacement_character_in_sound_utf8_is_text() -> None:
    assert table(read("a,b\n\ufffd,2\n")) == [(2, "\ufffd", "2")]


def test_giant_fields_and_lines() -> None:
    sheet = read("a,b\n1,2\n" + "x" * 65 + ",3\n" + "y" * 64 + ",4\n")
    assert [row[0] for row in table(sheet)] == [2, 4]
    assert "longer than 64 characters" in sheet.reasons[0].reason
    sheet = read("a,b\n" + "z" * 5_000_000)
    assert (sheet.n_rows, sheet.n_rejected) == (0, 1)


def test_only_the_first_rejects_are_kept_but_all_are_counted() -> None:
    sheet = read("a,b\n" + "1\n" * 50, replace(FORM, max_rejects=7))
    assert (len(sheet.reasons), sheet.n_rejected) == (7, 50)


@pytest.mark.parametrize("encoding", ["cp1252", "utf-16", "latin-1", "shift-jis", "utf-8-sig"])
def test_encodings_of_feeds(encoding: str) -> None:
    text = "a,b\nx,2\n" if encoding == "shift-jis" else "a,b\nµ,2\n"
    sheet = read(text.encode(encoding), replace(FORM, encoding=encoding))
    assert table(sheet) == [(2, text[4], "2")]


def test_other_separators_and_lines_in_front() -> None:
    form = replace(FORM, separator=";", skip_lines=2)
    assert table(read("# gauge\n# 7\n\na;b\n1,5;2\n", form)) == [(5, "1,5", "2")]


def test_trailing_separators_are_no_columns() -> None:
    assert table(read("a,b,,\n1,2,,\n")) == [(2, "1", "2")]
    assert "column 3 has no name" in str(refusal("a,b,\n1,2,3\n"))


@pytest.mark.parametrize(
    ("data", "line", "words"),
    [
        (b"", 1, "is empty"),
        (b"\n\n  \n", 1, "is empty"),
        (b"\xef\xbb\xbf", 1, "is empty"),
        (b"a,b,a\n", 1, "two columns have this name"),
        (b"\n\na,b, a\n", 3, "two columns have this name"),
        ("a,b\n".encode("utf-16-le"), 1, "NUL"),
        (b"\x89PNG\r\n\x1a\n\x00\x00\x00\rIHDR", 1, "not in this encoding"),
        (b"x" * 100, 1, "field larger"),
        (b",".join(b"c%d" % i for i in range(2500)), 1, "longer than 4096 bytes"),
    ],
)
def test_what_is_no_table_is_refused(data: bytes, line: int, words: str) -> None:
    reason = refusal(data).reason
    assert reason.line == line
    assert words in reason.reason


def test_lines_in_front_that_are_not_there() -> None:
    assert "skips 5 lines" in str(refusal("a,b\n", replace(FORM, skip_lines=5)))


def test_wrong_multibyte_encoding_is_refused_or_rejected() -> None:
    form = replace(FORM, encoding="utf-16")
    assert refusal(b"abc", form).reason.reason


CELLS = st.text(alphabet='ab1 é"\n\r,;', max_size=6)
TABLES = st.lists(st.lists(CELLS, min_size=3, max_size=3), max_size=8)


@given(TABLES, st.sampled_from(["\n", "\r\n"]), st.sampled_from([csv.QUOTE_MINIMAL, csv.QUOTE_ALL]))
def test_what_the_csv_module_wrote_comes_back(
    rows: list[list[str]], end: str, quoting: int
) -> None:
    if quoting == csv.QUOTE_MINIMAL:
        # The module leaves a lone CR bare where LF ends the lines.
        rows = [[cell.replace("\r", "") for cell in row] for row in rows]
    out = io.StringIO()
    writer = csv.writer(out, lineterminator=end, quoting=quoting)  # type: ignore[arg-type]
    writer.writerow(["p", "q", "r"])
    writer.writerows(rows)
    sheet = read(out.getvalue(), plain=("r",))
    assert sheet.reasons == ()
    expected = [tuple(cell.strip() for cell in row) for row in rows]
    found = [tuple(c.at(i).strip() for c in sheet.columns.values()) for i in range(sheet.n_rows)]
    assert found == expected


BODIES = st.one_of(
    st.text(alphabet='ab, \n\r"\0é\ufffd', max_size=60),
    st.text(alphabet="a,\n", max_size=60),
    st.lists(
        st.sampled_from(
            ["1,2", "", "\r", "3", "4,5,6", "\0,7", "é,\ufffd", ",", '"8",9', "x" * 65 + ",1", " "]
        ),
        max_size=12,
    ).map("\n".join),
)


@given(BODIES, st.booleans(), st.sampled_from([(), ("k",)]))
@settings(max_examples=400)
def test_the_fast_way_agrees_with_the_exact_one(
    body: str, damaged: bool, plain: tuple[str, ...]
) -> None:
    text = parse.Text(("h,k\n" + body).encode(), damaged)
    header = parse.read_header(text, FORM)
    quick = fast.rows(text, header, FORM, plain)
    slow = exact.rows(text, header, FORM)
    if quick is None:
        assert set(body) & set('"\r')  # nothing else needs the exact way
        return
    assert [c.to_pylist() for c in quick.columns] == [c.to_pylist() for c in slow.columns]
    assert quick.lines.tolist() == slow.lines.tolist()
    assert quick.n_rejected == slow.n_rejected == len(quick.reasons)
    for one, other in zip(quick.reasons, slow.reasons, strict=True):
        assert one.line == other.line
        assert other.value is None or one.value == other.value  # the csv module shows no long field


def test_files_of_several_blocks(monkeypatch: pytest.MonkeyPatch) -> None:
    monkeypatch.setattr(fast, "_BLOCK", 64)
    rows = [f"{i},{i % 7}" for i in range(100)]
    rows[50] = "ragged"
    sheet = read("a,b\n" + "\n".join(rows) + "\n", plain=("a",))
    assert [r.line for r in sheet.reasons] == [52]
    assert [row[1:] for row in table(sheet)] == [
        (str(i), str(i % 7)) for i in range(100) if i != 50
    ]


@given(st.binary(max_size=80), st.sampled_from(["utf-8", "cp1252", "utf-16", "utf-7"]))
def test_any_bytes_are_read_or_refused_and_every_line_is_accounted(
    data: bytes, encoding: str
) -> None:
    try:
        sheet = read(b"h,k\n" + data, replace(FORM, encoding=encoding))
    except Refused:
        return
    assert sheet.n_rejected == len(sheet.reasons)
    lines = sorted([*sheet.lines.tolist(), *(r.line for r in sheet.reasons if r.line)])
    assert len(set(lines)) == len(lines)
    assert not lines or lines[0] > sheet.header_line


def test_too_many_columns() -> None:
    header = ",".join(f"c{i}" for i in range(2500))
    with pytest.raises(Refused, match="more than 2000 columns"):
        read(header + "\n", parse.TextFormat())


def test_a_separator_of_several_bytes() -> None:
    form = replace(FORM, separator="¦", encoding="utf-8")
    assert table(read("a¦b\n1¦2\n", form)) == [(2, "1", "2")]
