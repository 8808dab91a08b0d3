"""Tables, exact amounts, codes and frames, on small tables whose answers can be read off."""

from __future__ import annotations

from decimal import Decimal

import numpy as np
import pytest
from hypothesis import given
from hypothesis import strategies as st

from core.errors import SheetError
from core.frame import Frame, Table, clean, frame_of, listed, nearest, shortened
from core.tables import inline_table


def table(**columns: list[str]) -> Table:
    names = list(columns)
    return inline_table("crew.csv", [dict(zip(names, row, strict=True)) for row in zip(*columns.values(), strict=True)])


def faults_of(call: object, *arguments: object) -> list[str]:
    with pytest.raises(SheetError) as caught:
        call(*arguments)  # type: ignore[operator]
    return [str(fault) for fault in caught.value.faults]


# --- words --------------------------------------------------------------------------------------------------


@pytest.mark.parametrize(
    ("text", "expected"),
    [
        (" a ", "a"),
        ("\u00a0a\u3000", "a"),
        ("Zoe\u0308", "Zo\u00eb"),
        ("\u212b", "\u00c5"),
        ("a  b", "a  b"),
        ("", ""),
    ],
)
def test_clean_strips_unicode_space_and_composes(text: str, expected: str) -> None:
    assert clean(text) == expected


@pytest.mark.parametrize(
    ("word", "expected"), [("bagde", "badge"), ("BADGE", "badge"), ("dept.", "dept"), ("zzz", ""), ("", "")]
)
def test_nearest(word: str, expected: str) -> None:
    assert nearest(word, ["badge", "dept", "grade"]) == expected


def test_listed_and_shortened() -> None:
    assert listed(["a", "b"]) == "a, b"
    assert listed(["a", "b", "c", "d"], 2) == "a, b and 2 more"
    assert shortened("a\n b") == "a b"
    assert shortened("x" * 100) == "x" * 57 + "..."


# --- tables -------------------------------------------------------------------------------------------------


def test_codes_are_sorted_as_text_and_kept() -> None:
    crew = table(dept=["deck", "engine", "", "Deck", "deck", "\u00e9", "z"])
    codes, values = crew.codes("dept")
    assert values == ("", "Deck", "deck", "engine", "z", "\u00e9")
    assert codes.tolist() == [2, 3, 0, 1, 2, 5, 4]
    assert codes.dtype == np.int32
    assert not codes.flags.writeable
    assert crew.codes("dept")[0] is codes


@given(st.lists(st.text(st.characters(exclude_categories=["Cc", "Cs"], exclude_characters="\ufeff")), min_size=1))
def test_codes_give_back_every_cell(cells: list[str]) -> None:
    crew = table(word=cells)
    codes, values = crew.codes("word")
    assert [values[code] for code in codes] == crew.text("word") == [clean(cell) for cell in cells]
    assert list(values) == sorted(set(values))


def test_unknown_column_names_the_nearest() -> None:
    crew = table(badge=["1"], dept=["deck"])
    for method in (crew.text, crew.codes, crew.amounts):
        (fault,) = faults_of(method, "dpet")
        assert "crew.csv: there is no such column. Found: dpet. Allowed: badge, dept." in fault
        assert "'dept'" in fault
    assert not crew.is_number("dpet")


@pytest.mark.parametrize(
    ("cells", "values", "decimals"),
    [
        (["1", "2"], [1, 2], 0),
        (["1.5", "-2", "+3.25"], [150, -200, 325], 2),
        (["-1250.50", ".5", "-.05"], [-125050, 50, -5], 2),
        (["007", "0", "-0"], [7, 0, 0], 0),
        (["999999999999999999"], [10**18 - 1], 0),
        (["0.000000000000000001", "0"], [1, 0], 18),
        (["000000000000000000000000001.0"], [10], 1),
        ([" 12 "], [12], 0),
    ],
)
def test_amounts(cells: list[str], values: list[int], decimals: int) -> None:
    crew = table(amount=cells)
    amounts = crew.amounts("amount")
    assert amounts.values.tolist() == values
    assert amounts.decimals == decimals
    assert amounts.values.dtype == np.int64
    assert crew.is_number("amount")
    assert crew.amounts("amount") is amounts


@pytest.mark.parametrize(
    "cell",
    [
        *(
            "nan",
            "NaN",
            "inf",
            "-inf",
            "1e400",
            "1E3",
            "12a",
            "1,5",
            "1.250,50",
            "1 000",
            "--1",
            "1.",
            ".",
            "-",
            "+",
        ),
        *(
            "0x10",
            "1_000",
            "\u0661",
            "\u2212" + "5",
            "12.5.1",
            "\u00bd",
            "1000000000000000000",
            "9" * 40,
            "1" + "0" * 400,
        ),
    ],
)
def test_what_is_no_amount(cell: str) -> None:
    crew = table(amount=["1", cell, "3"])
    (fault,) = faults_of(crew.amounts, "amount")
    assert fault.startswith("crew.csv, row 2, column amount: this ")
    assert "Found: " + cell[:50] in fault
    assert "-1250.50" in fault
    assert not crew.is_number("amount")


def test_every_bad_line_is_named_up_to_ten() -> None:
    crew = table(amount=["1"] + ["x"] * 5 + [""] * 8)
    faults = faults_of(crew.amounts, "amount")
    assert len(faults) == 11
    assert [fault.split(",")[1] for fault in faults[:10]] == [f" row {row}" for row in range(2, 12)]
    assert "the cell is blank" in faults[5]
    assert "and 3 more rows" in faults[10]
    assert faults == faults_of(crew.amounts, "amount")


def test_digits_count_at_the_decimals_of_the_column() -> None:
    crew = table(amount=["99999999999999999", "0.1", "0.01"])
    (fault,) = faults_of(crew.amounts, "amount")
    assert "row 1" in fault
    assert "too many digits" in fault


def test_the_sum_must_stay_exact() -> None:
    most = 10**18 - 1
    assert table(amount=[str(most)] * 4).amounts("amount").values.sum() == 4 * most
    (fault,) = faults_of(table(amount=[str(most), str(-most)] * 3).amounts, "amount")
    assert "too large to be added up exactly" in fault
    assert str(2**62) in fault


@given(st.lists(st.decimals(-(10**9), 10**9, allow_nan=False, places=3), min_size=1, max_size=20))
def test_amounts_are_exact(numbers: list[Decimal]) -> None:
    amounts = table(amount=[format(number, "f") for number in numbers]).amounts("amount")
    assert [Decimal(int(value)).scaleb(-amounts.decimals) for value in amounts.values] == numbers
    assert Decimal(amounts.in_words(int(amounts.values.sum()))) == sum(numbers)


# --- frames -------------------------------------------------------------------------------------------------


def crew_frame() -> Frame:
    return frame_of(
        table(
            badge=["007", "12", "Zoe\u0308"],
            dept=["deck", "", "deck"],
            pay=["10.50", "-20.75", "0"],
            year=["1999", "", "2001"],
        ),
        "badge",
    )


def test_frame_of() -> None:
    frame = crew_frame()
    assert frame.ids == ["007", "12", "Zo\u00eb"]
    assert frame.size == 3
    assert frame.columns == ("badge", "dept", "pay", "year")
    assert [frame.index(unit) for unit in ("007", "12", "Zo\u00eb", " Zoe\u0308 ", "7")] == [0, 1, 2, 2, None]
    assert frame.codes("dept")[1] == ("", "deck")
    assert frame.amounts("pay").values.tolist() == [1050, -2075, 0]


def test_totals_and_blanks() -> None:
    frame = crew_frame()
    assert frame.totals() == {"pay": "-10.25"}
    assert frame.blanks() == {"dept": 1, "year": 1}
    assert frame_of(table(badge=["1"], n=["-0.05"], k=["5"]), "badge").totals() == {"n": "-0.05", "k": "5"}


def test_missing_id_column() -> None:
    (fault,) = faults_of(frame_of, table(badge=["1"], dept=["x"]), "bagde")
    assert fault.startswith("crew.csv, id: the list has no such column to take the ids from.")
    assert "Found: bagde. Allowed: badge, dept. Did you mean 'badge'?" in fault


def test_empty_list() -> None:
    crew = table(badge=["1"])
    empty = Table("crew.csv", crew.data.clear(), crew.lines[:0], "", ())
    assert "nothing to draw from" in faults_of(frame_of, empty, "badge")[0]
    assert not empty.is_number("badge")


def test_blank_and_repeated_ids_in_one_go() -> None:
    crew = table(badge=["Zoe\u0308", "", "b", " Zo\u00eb", "c", "b", " ", "b"])
    same = "the same id stands on rows {} (white space around an id and the way accents are stored"
    same += " make no difference)"
    assert faults_of(frame_of, crew, "badge") == [
        "crew.csv, row 2, column badge: this row has no id.",
        "crew.csv, row 7, column badge: this row has no id.",
        f"crew.csv, column badge: {same.format('1 and 4')}. Found: Zo\u00eb.",
        f"crew.csv, column badge: {same.format('3, 6 and 8')}. Found: b.",
    ]


def test_ids_at_fault_are_capped() -> None:
    faults = faults_of(frame_of, table(badge=[""] * 15 + [str(n) for n in range(20)] * 2 + ["x"] * 30), "badge")
    assert len(faults) == 21
    assert "and 16 more ids" in faults[20]
    (alone,) = faults_of(frame_of, table(badge=["x"] * 30), "badge")
    assert "rows 1, 2, 3, 4, 5, 6, 7, 8, 9, 10 and 20 more" in alone
