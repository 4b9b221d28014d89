"""Stock files: what a drawer holds is read as it is meant, or refused with the place."""

from __future__ import annotations

import pytest

from netlist.stockfile import LARGEST_FILE, MOST_LINES, parse_stock, read_stock
from synth.errors import JobError
from synth.parts import StockItem

HEADER = "kind,value,tolerance,count\n"
SMALL = HEADER + "resistor,4k7,1 %,3\ncapacitor,10 nF,5 %,\n"


def refusal(text: str) -> str:
    with pytest.raises(JobError, match=r"^drawer\.csv") as caught:
        parse_stock(text, name="drawer.csv")
    message = str(caught.value)
    assert "\n" not in message
    return message


def test_kinds_values_tolerances_and_counts_are_read() -> None:
    stock = parse_stock(SMALL)
    assert stock == {
        "resistor": (StockItem(value=4700.0, tolerance=0.01, count=3),),
        "capacitor": (StockItem(value=1e-8, tolerance=0.05, count=None),),
    }


def test_columns_come_in_any_order_and_the_count_may_be_left_out() -> None:
    stock = parse_stock("Tolerance, Value ,KIND\n0.01,10.2 kohm,Resistor\n")
    assert stock == {"resistor": (StockItem(value=10200.0, tolerance=0.01, count=None),)}


@pytest.mark.parametrize(
    "text",
    [
        SMALL.replace("\n", "\r\n"),
        SMALL.replace("\n", "\r"),
        "\n" + SMALL.replace("\n", "\n\n") + ",,,\n",
        SMALL.replace("4k7", '"4k7"'),
        SMALL.rstrip("\n"),
    ],
    ids=["CRLF", "CR", "empty lines", "quotes", "no newline at the end"],
)
def test_line_ends_empty_lines_and_quotes_do_not_matter(text: str) -> None:
    assert parse_stock(text) == parse_stock(SMALL)


@pytest.mark.parametrize("separator", [";", "\t"])
def test_a_spreadsheet_may_write_other_separators_and_decimal_commas(separator: str) -> None:
    text = SMALL.replace(",", separator).replace("4k7", "4,7 kohm").replace("1 %", "1,0 %")
    assert parse_stock(text) == parse_stock(SMALL)


def test_a_comma_that_may_group_thousands_is_refused() -> None:
    text = "kind;value;tolerance\nresistor;4,700;1 %\n"
    assert refusal(text).startswith("drawer.csv:2: column 2 (value): got '4,700', expected a res")


def test_lines_of_the_same_part_add_up() -> None:
    """Other tolerances are other parts; enough of one line is enough in all."""
    lines = ["4k7,1 %,3", "4.7 kohm,0.01,4", "4k7,5 %,2", "10k,1 %,7", "10k,1 %,"]
    stock = parse_stock(HEADER + "".join(f"resistor,{line}\n" for line in lines))
    assert stock["resistor"] == (
        StockItem(value=4700.0, tolerance=0.01, count=7),
        StockItem(value=4700.0, tolerance=0.05, count=2),
        StockItem(value=10000.0, tolerance=0.01, count=None),
    )


def test_a_count_of_zero_is_no_part() -> None:
    stock = parse_stock(HEADER + "resistor,4k7,1 %,0\nresistor,10k,1 %,1\n")
    assert [i.value for i in stock["resistor"]] == [10000.0]
    assert refusal(HEADER + "resistor,4k7,1 %,0\ncapacitor,1 nF,5 %,\n") == (
        "drawer.csv: got no resistor with a count above 0, expected at least one"
    )


@pytest.mark.parametrize(
    ("text", "message"),
    [
        ("", ":1: got no column kind, expected kind, value, tolerance"),
        (HEADER, ": got no parts, expected at least one line below the header"),
        ("value,tolerance\n", ":1: got no column kind, expected kind, value, tolerance"),
        (
            "kind,value,tolerance,cuont\n",
            ":1: column 4: got 'cuont', expected a header of kind, value, tolerance and, where "
            "wanted, count",
        ),
        (
            "kind,value,value,tolerance\n",
            ":1: column 3: got 'value' twice, expected a header of kind, value, tolerance and, "
            "where wanted, count",
        ),
        (
            HEADER + "\nresistor,4k7,1 %,1\ncoil,1,1 %,1\n",
            ":4: column 1 (kind): got 'coil', expected resistor or capacitor",
        ),
        (
            HEADER + "capacitor,4k7,1 %,1\n",
            ":2: column 2 (value): got '4k7', expected a capacitance such as '10 nF' or '2n2'",
        ),
        (
            HEADER + "resistor,0,1 %,1\n",
            ":2: column 2 (value): got '0', expected a value above 0",
        ),
        (
            HEADER + "resistor,4.70001 k,1 %,1\n",
            ":2: column 2 (value): got '4.70001 k', expected at most four digits",
        ),
        (
            HEADER + "resistor,4k7,1,1\n",
            ":2: column 3 (tolerance): got '1', expected 0 to below 100 %",
        ),
        (
            HEADER + "resistor,4k7\n",
            ":2: column 3 (tolerance): got '', expected a percentage such as '1 %' or a plain "
            "ratio such as 0.01",
        ),
        (
            HEADER + "resistor,4k7,1 %,-3\n",
            ":2: column 4 (count): got '-3', expected a whole number from 0 up, or nothing",
        ),
        (
            HEADER + "resistor,4k7,1 %,3,shelf\n",
            ":2: column 5: got 'shelf', expected 4 columns as in the header",
        ),
    ],
)
def test_what_cannot_be_read_is_refused_with_its_place(text: str, message: str) -> None:
    assert refusal(text) == f"drawer.csv{message}"


def test_open_quotes_are_refused_with_the_line_they_start_on() -> None:
    assert refusal(HEADER + 'resistor,"4k7,1 %,1\n').startswith("drawer.csv:2: ")


def test_a_stock_is_no_catalogue() -> None:
    text = HEADER + "resistor,4k7,1 %,1\n" * (MOST_LINES + 1)
    assert refusal(text).endswith(f"got more than {MOST_LINES} lines of parts")


def test_a_file_may_start_with_a_byte_order_mark(tmp_path) -> None:
    file = tmp_path / "drawer.csv"
    file.write_bytes(b"\xef\xbb\xbf" + SMALL.encode())
    assert read_stock(file) == parse_stock(SMALL)


@pytest.mark.parametrize(
    ("content", "message"),
    [
        (None, "drawer.csv: no such file, expected a stock file in CSV"),
        (b"\xff\xfek\x00", "drawer.csv: got a byte 0xff at position 0, expected text in UTF-8"),
        (b"x" * (LARGEST_FILE + 1), "got more than 1000000 bytes, expected a stock file"),
        (b"\0" * 10, "drawer.csv:1: "),
    ],
)
def test_a_file_that_is_no_stock_is_refused(tmp_path, content, message) -> None:
    file = tmp_path / "drawer.csv"
    if content is not None:
        file.write_bytes(content)
    with pytest.raises(JobError) as caught:
        read_stock(file)
    assert message in str(caught.value)
