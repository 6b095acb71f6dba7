"""CSV and spreadsheets: rows as records, and every way in which a table can be damaged."""

from __future__ import annotations

import io
import zipfile
from datetime import date, datetime, time
from decimal import Decimal

import pytest
from openpyxl.cell.cell import ERROR_CODES

from fhirgallop.intake.limits import Limits
from fhirgallop.intake.table import read_csv
from fhirgallop.intake.workbook import read_workbook


def csv(text, **options):
    return list(read_csv(io.BytesIO(text if isinstance(text, bytes) else text.encode()), **options))


def sheet(data, **options):
    return list(read_workbook(io.BytesIO(data), **options))


def told(reads):
    return [
        (
            r.line,
            {n: f.values for n, f in r.fields.items()} if hasattr(r, "fields") else None,
            [i.rule for i in r.issues],
        )
        for r in reads
    ]


@pytest.mark.parametrize("mark", [",", ";", "\t", "|"])
@pytest.mark.parametrize("end", ["\n", "\r\n", "\r"])
def test_rows_are_records_whatever_separates_them(mark, end):
    text = end.join([mark.join([" pid ", "s4"]), mark.join(["P1", "yes"]), "", mark.join(["P2", " "])])
    assert told(csv(text)) == [(2, {"pid": ("P1",), "s4": ("yes",)}, []), (4, {"pid": ("P2",), "s4": ()}, [])]


def test_a_line_may_name_the_separator():
    assert told(csv("sep=|\na,x|b\n1|2\n")) == [(3, {"a,x": ("1",), "b": ("2",)}, [])]


def test_comma_decimals_in_a_semicolon_table_pass_as_text():
    assert told(csv("height;weight\n1,75;70,5\n")) == [(2, {"height": ("1,75",), "weight": ("70,5",)}, [])]


def test_quoted_cells_hold_separators_marks_and_lines():
    reads = csv('a,b\n"x, ""y""","one\r\ntwo"\n3,4\n')
    assert told(reads) == [
        (2, {"a": ('x, "y"',), "b": ("one\r\ntwo",)}, []),
        (4, {"a": ("3",), "b": ("4",)}, []),
    ]


def test_ragged_rows_are_refused_and_the_others_come():
    assert told(csv("a,b\n1\n2,3,4\n5,6,\n")) == [
        (2, None, ["csv-ragged-row"]),
        (3, None, ["csv-ragged-row"]),
        (4, {"a": ("5",), "b": ("6",)}, []),
    ]


@pytest.mark.parametrize("row", ['"open', '"a"b,c'])
def test_bad_quoting_is_refused(row):
    assert told(csv(f"a,b\n1,2\n{row}\n"))[1][2] == ["csv-quoting"]


def test_repeated_and_missing_headers():
    assert told(csv("a,a,,\n1,2,3,\n4,5,,\n")) == [
        (2, {"a": ("1",), "a[1]": ("2",), "column 3": ("3",)}, ["csv-header-twice", "csv-no-header"]),
        (3, {"a": ("4",), "a[1]": ("5",)}, []),
    ]


def test_encodings():
    assert told(csv("\ufeffa\nMüller\n")) == [(2, {"a": ("Müller",)}, ["csv-byte-order-mark"])]
    assert told(csv("a\nMüller\nx\n".encode("latin-1"))) == [
        (2, {"a": ("Müller",)}, ["csv-not-utf8"]),
        (3, {"a": ("x",)}, []),
    ]
    assert told(csv("a\n\x80\n".encode("latin-1")))[0][1] == {"a": ("€",)}, "Windows-1252, not Latin-1 alone"
    assert [r[2] for r in told(csv("a\nü\n".encode() + b"\xfc\n1\n"))] == [[], ["csv-mixed-encoding"], []]
    assert [r[2] for r in told(csv(b"a\n\xfc\n\xc3\xbc\n"))] == [["csv-not-utf8"], ["csv-mixed-encoding"]]
    assert told(csv(b"a\n\x81\n"))[0][2] == ["csv-unknown-encoding"]
    assert told(csv("a\nb\n".encode("utf-16")))[0][2] == ["csv-utf16"]
    assert told(csv(b"a\nx\0y\nz\n")) == [(2, None, ["csv-binary"]), (3, {"a": ("z",)}, [])]


@pytest.mark.parametrize("text", ["", "\n\n", "a,b\n", "a,b\n,\n"])
def test_an_empty_table_is_said(text):
    (read,) = csv(text)
    assert [i.rule for i in read.issues] == ["csv-no-record"]


def test_limits():
    small = Limits(record_bytes=100, text=50, rows=2, fields=3, name=20)
    assert told(csv("a\n" + "x" * 60 + "\n1\n", limits=small))[0][2] == ["csv-cell-too-long"]
    assert told(csv("a\n" + "x" * 200 + "\n1\n", limits=small))[0][2] == ["csv-line-too-long"]
    assert told(csv("a\n1\n2\n3\n4\n", limits=small))[-1] == (4, None, ["file-too-many-rows"])
    assert told(csv("a,b,c,d\n1,2,3,4\n", limits=small)) == [(1, None, ["csv-too-many-columns"])]
    assert told(csv("n" * 30 + "\n1\n", limits=small)) == [(1, None, ["csv-header-too-long"])]


def test_a_quotation_mark_never_closed_does_not_eat_memory():
    reads = csv('a,b\n"' + "x,1\n" * 40_000)
    assert "lines 2 to " in reads[0].issues[0].text, "what was swallowed is named"
    assert {rule for read in reads for rule in (i.rule for i in read.issues)} <= {
        "csv-quoting",
        "csv-ragged-row",
    }


def test_spreadsheet_values(book):
    rows = [
        ["text", "number", "whole", "day", "moment", "clock", "yes", "digits", "comma"],
        ["a", 37.5, 2530, date(2026, 3, 14), datetime(2026, 3, 14, 9, 30), time(9, 30), True, "007", "1,5"],  # noqa: DTZ001  a spreadsheet knows no zones
    ]
    assert told(sheet(book(rows))) == [
        (
            2,
            {
                "text": ("a",),
                "number": (Decimal("37.5"),),
                "whole": (Decimal(2530),),
                "day": ("2026-03-14",),
                "moment": ("2026-03-14T09:30:00",),
                "clock": ("09:30:00",),
                "yes": (True,),
                "digits": ("007",),
                "comma": ("1,5",),
            },
            [],
        )
    ]


def test_binary_fractions_come_as_the_decimals_that_were_typed(book):
    ((_, fields, _),) = told(sheet(book([["x", "y"], [0.1 + 0.2, 1e20]])))
    assert (str(fields["x"][0]), str(fields["y"][0])) == ("0.3", "100000000000000000000")


def test_merged_cells_are_said_in_each_row_they_touch(book):
    data = book([["a", "b"], ["x", 1], [None, 2], ["y", 3]], lambda ws: ws.merge_cells("A2:A3"))
    reads = sheet(data, source="exams.xlsx")
    assert told(reads) == [
        (2, {"a": ("x",), "b": (Decimal(1),)}, ["sheet-merged-cells"]),
        (3, {"a": (), "b": (Decimal(2),)}, ["sheet-merged-cells"]),
        (4, {"a": ("y",), "b": (Decimal(3),)}, []),
    ]
    assert "A2:A3" in reads[0].issues[0].text


def test_errors_and_formulas_without_a_result_are_not_blanks(book):
    rows = [["a", "b"], ["#N/A", 1], ["=1/0", 2], ["fine", 3]]
    assert "#N/A" in ERROR_CODES
    assert told(sheet(book(rows))) == [
        (2, None, ["sheet-unusable-cell"]),
        (3, None, ["sheet-unusable-cell"]),
        (4, {"a": ("fine",), "b": (Decimal(3),)}, []),
    ]


def test_the_first_sheet_in_use_or_the_one_asked_for(book):
    def change(ws):
        ws.parent.create_sheet("Second").append(["b"])
        ws.parent["Second"].append([2])

    data = book([["a"], [1]], change)
    assert told(sheet(data)) == [(2, {"a": (Decimal(1),)}, ["sheet-others"])]
    assert told(sheet(data, sheet="Second")) == [(2, {"b": (Decimal(2),)}, ["sheet-others"])]
    assert told(sheet(data, sheet="Third")) == [(0, None, ["sheet-unknown"])]


def test_a_table_that_starts_further_down_keeps_its_row_numbers(book):
    assert told(sheet(book([[], [], [None, "a"], [None, "x"]]))) == [(4, {"a": ("x",)}, [])]


def test_a_far_corner_cell_is_refused_before_it_is_laid_out(book):
    def far(ws):
        ws.cell(1_048_576, 16_384).value = "x"

    assert told(sheet(book([["a"], [1]], far))) == [(0, None, ["sheet-too-large"])]


def repacked(data, change):
    """The zip file with `change(name, content)` applied to each part."""
    made = io.BytesIO()
    with zipfile.ZipFile(io.BytesIO(data)) as old, zipfile.ZipFile(made, "w", zipfile.ZIP_DEFLATED) as new:
        for name in old.namelist():
            new.writestr(name, change(name, old.read(name)))
    return made.getvalue()


def test_hostile_packages_are_refused(book):
    data = book([["a"], [1]])

    def in_sheet(old, new):
        return repacked(data, lambda n, c: c.replace(old, new) if "sheet1.xml" in n else c)

    bomb = repacked(data, lambda n, c: c + b" " * 3_000_000 if "sheet1.xml" in n else c)
    assert told(sheet(bomb, limits=Limits(unpacked_bytes=1_000_000)))[0][2] == ["sheet-too-large"]
    assert told(sheet(in_sheet(b'r="A2"', b'r="&#88;FD1048576"')))[0][2] == ["sheet-too-large"]
    assert told(sheet(in_sheet(b"<worksheet", b"<!DOCTYPE x><worksheet")))[0][2] == ["sheet-unreadable"]
    assert told(sheet(in_sheet(b'r="A2"', b'r="A99999999999"')))[0][2] == ["sheet-unreadable"]
    assert told(sheet(in_sheet(b"</worksheet>", b"")))[0][2] == ["sheet-unreadable"]
    assert told(sheet(data[: len(data) // 2]))[0][2] == ["sheet-unreadable"]
    assert told(sheet(b"\xd0\xcf\x11\xe0" + b"0" * 100))[0][2] == ["sheet-old-format"]
    assert told(sheet(b"a,b\n1,2\n"))[0][2] == ["sheet-unreadable"]
    assert told(sheet(data, limits=Limits(workbook_bytes=10)))[0][2] == ["sheet-too-large"]
    empty = io.BytesIO()
    zipfile.ZipFile(empty, "w").close()
    assert told(sheet(empty.getvalue()))[0][2] == ["sheet-unreadable"]


ODS = """<?xml version="1.0" encoding="UTF-8"?>
<office:document-content xmlns:office="urn:oasis:names:tc:opendocument:xmlns:office:1.0"
 xmlns:table="urn:oasis:names:tc:opendocument:xmlns:table:1.0"
 xmlns:text="urn:oasis:names:tc:opendocument:xmlns:text:1.0" office:version="1.3"><office:body>
<office:spreadsheet><table:table table:name="Exams">{rows}</table:table></office:spreadsheet>
</office:body></office:document-content>"""


def ods(rows):
    made = io.BytesIO()
    with zipfile.ZipFile(made, "w") as package:
        package.writestr("mimetype", "application/vnd.oasis.opendocument.spreadsheet")
        package.writestr("META-INF/manifest.xml", "<manifest/>")
        package.writestr("content.xml", ODS.format(rows=rows))
    return made.getvalue()


CELL = '<table:table-cell office:value-type="string"{more}><text:p>{text}</text:p></table:table-cell>'


def test_open_document_tables():
    number = CELL.format(more=' office:value="37.5"', text="37.5").replace('"string"', '"float"')
    rows = (
        f"<table:table-row>{CELL.format(more='', text='a')}{CELL.format(more='', text='b')}</table:table-row>"
        f"<table:table-row>{CELL.format(more='', text='x')}{number}</table:table-row>"
        '<table:table-row table:number-rows-repeated="1048574"><table:table-cell '
        'table:number-columns-repeated="16384"/></table:table-row>'
    )
    assert told(sheet(ods(rows))) == [(2, {"a": ("x",), "b": (Decimal("37.5"),)}, [])]


def test_open_document_repeats_cannot_unfold_without_end():
    wide = CELL.format(more=' table:number-columns-repeated="16384"', text="x")
    rows = f'<table:table-row table:number-rows-repeated="1048576">{wide}</table:table-row>'
    assert told(sheet(ods(rows))) == [(0, None, ["sheet-too-large"])]
