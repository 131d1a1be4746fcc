"""What a file holds is told, and nothing becomes a number in silence."""

from __future__ import annotations

import gzip
from pathlib import Path

import numpy as np
import pandas as pd
import pytest

from clingstone.intake import files
from clingstone.intake.columns import fingerprint
from clingstone.needs import InputError


@pytest.fixture
def wells() -> pd.DataFrame:
    return pd.DataFrame(
        {
            "well": ["w1", "w2", "w3"],
            "depth": [3.5, 12.0, np.nan],
            "visits": [1, 2, 3],
            "open": [True, False, True],
        }
    )


def written(folder: Path, content: bytes | str, name: str = "table.csv") -> Path:
    path = folder / name
    path.write_bytes(content if isinstance(content, bytes) else content.encode())
    return path


def test_semicolons_decimal_comma_and_a_mark_are_sniffed_and_told(tmp_path: Path) -> None:
    path = written(tmp_path, b"\xef\xbb\xbfwell;depth\nw1;3,5\nw2;12\n")
    frame, origin, _ = files.read(path)
    assert frame["depth"].tolist() == [3.5, 12.0]
    assert list(frame.columns) == ["well", "depth"]
    assert origin == {
        "file": "table.csv",
        "format": "delimited text",
        "encoding": "utf-8 with a mark",
        "separator": "semicolon",
        "decimal mark": "comma",
    }


@pytest.mark.parametrize(("mark", "word"), [(",", "comma"), (";", "semicolon"), ("\t", "tab"), ("|", "bar")])
def test_every_separator(tmp_path: Path, mark: str, word: str) -> None:
    path = written(tmp_path, f"a{mark}b\n1{mark}2.5\n3{mark}4.5\n")
    frame, origin, _ = files.read(path)
    assert origin["separator"] == word
    assert frame.to_dict("list") == {"a": [1, 3], "b": [2.5, 4.5]}


def test_another_encoding_is_read_and_told(tmp_path: Path) -> None:
    path = written(tmp_path, "räume;y\nMühle;1\nHof;2\n".encode("cp1252"))
    frame, origin, notes = files.read(path)
    assert frame["räume"].tolist() == ["Mühle", "Hof"]
    assert origin["encoding"] == "windows-1252"
    assert "not UTF-8 (line 1)" in notes[0]


def test_utf_16(tmp_path: Path) -> None:
    frame, origin, _ = files.read(written(tmp_path, "a,ü\n1,2\n".encode("utf-16")))
    assert origin["encoding"] == "utf-16"
    assert list(frame.columns) == ["a", "ü"]


def test_leading_zeros_stay_text(tmp_path: Path) -> None:
    frame, _, notes = files.read(written(tmp_path, "id,y\n001,1\n010,2\n"))
    assert frame["id"].tolist() == ["001", "010"]
    assert notes == ("id has leading zeros (‘001’ and ‘010’), so it is kept as text.",)


def test_a_column_with_one_odd_value_is_left_as_text(tmp_path: Path) -> None:
    frame, _, _ = files.read(written(tmp_path, "y,x\n1,2\n<0.1,3\n4,5\n"))
    assert frame["y"].tolist() == ["1", "<0.1", "4"]
    assert frame["x"].tolist() == [2, 3, 5]


def test_thousands_marks_are_not_guessed(tmp_path: Path) -> None:
    frame, _, _ = files.read(written(tmp_path, "y;x\n1.234,5;1\n20,5;2\n"))
    assert frame["y"].tolist() == ["1.234,5", "20,5"]


def test_missing_codes(tmp_path: Path) -> None:
    frame, _, notes = files.read(written(tmp_path, "y,arm\n1,None\nNA,b\n.,\n,n/a\n5,NaN\n"))
    assert np.isnan(frame["y"]).tolist() == [False, True, True, True, False]
    assert frame["arm"].isna().tolist() == [False, False, True, False, True]
    assert "‘.’ in y is read as missing (1 row)." in notes
    assert "‘None’ in arm is kept as a value of its own." in notes
    assert "‘NaN’ in arm is read as missing (1 row)." in notes


def test_quoted_fields_may_hold_separators_and_line_ends(tmp_path: Path) -> None:
    frame, _, _ = files.read(written(tmp_path, 'a,b\n"x,y",2\n"q\nr",3\n'))
    assert frame["a"].tolist() == ["x,y", "q\nr"]


def test_long_whole_numbers_are_exact(tmp_path: Path) -> None:
    frame, _, _ = files.read(written(tmp_path, "id,y\n900719925474099311,1\n900719925474099312,2\n"))
    assert frame["id"].tolist() == [900719925474099311, 900719925474099312]


def test_decimals_are_read_back_to_their_last_bit(tmp_path: Path) -> None:
    given = np.random.default_rng(12).normal(size=2000) * 10.0 ** np.arange(-10, 10).repeat(100)
    pd.DataFrame({"y": given}).to_csv(tmp_path / "w.csv", index=False)
    assert files.read(tmp_path / "w.csv")[0]["y"].tolist() == given.tolist()


def test_only_named_columns_are_kept(tmp_path: Path) -> None:
    frame, _, _ = files.read(written(tmp_path, "a,b,c\n1,2,3\n"), columns={"c", "a", "not there"})
    assert list(frame.columns) == ["a", "c"]


def test_gzip(tmp_path: Path) -> None:
    frame, _, _ = files.read(written(tmp_path, gzip.compress(b"a,b\n1,2\n"), "t.csv.gz"))
    assert frame.to_dict("list") == {"a": [1], "b": [2]}


def test_formats_with_equal_values_have_one_fingerprint(tmp_path: Path, wells: pd.DataFrame) -> None:
    wells.to_csv(tmp_path / "w.csv", index=False)
    wells.to_csv(tmp_path / "w.tsv", index=False, sep="\t")
    wells.to_parquet(tmp_path / "w.parquet")
    wells.to_excel(tmp_path / "w.xlsx", index=False)
    wells.assign(open=wells["open"].astype("int8")).to_stata(tmp_path / "w.dta", write_index=False)
    marks = set()
    for name in ("w.csv", "w.tsv", "w.parquet", "w.xlsx", "w.dta"):
        frame, origin, _ = files.read(tmp_path / name)
        assert origin["file"] == name
        marks.add(fingerprint(frame))
    assert len(marks) == 1
    assert marks != {fingerprint(wells.iloc[::-1])}
    assert marks != {fingerprint(wells.assign(depth=[3.5, 12.0, 1e-12]))}
    assert marks == {fingerprint(wells[wells.columns[::-1]])}


def test_excel_reads_the_first_sheet_and_says_so(tmp_path: Path, wells: pd.DataFrame) -> None:
    with pd.ExcelWriter(tmp_path / "w.xlsx") as book:
        wells.to_excel(book, sheet_name="readings", index=False)
        wells.to_excel(book, sheet_name="old", index=False)
    frame, origin, notes = files.read(tmp_path / "w.xlsx")
    assert origin["sheet"] == "readings"
    assert frame["visits"].tolist() == [1, 2, 3]
    assert notes == ("w.xlsx has 2 sheets; ‘readings’, the first, is read.",)


def test_stata_value_labels_become_levels(tmp_path: Path) -> None:
    made = pd.DataFrame(
        {"arm": pd.Categorical(["low", "high", "low"], categories=["low", "high"]), "y": [1.0, 2, 3]}
    )
    made.to_stata(tmp_path / "w.dta", write_index=False)
    frame, _, _ = files.read(tmp_path / "w.dta")
    assert frame["arm"].astype(str).tolist() == ["low", "high", "low"]


def test_an_index_of_a_parquet_file_becomes_a_column(tmp_path: Path, wells: pd.DataFrame) -> None:
    wells.set_index("well").to_parquet(tmp_path / "w.parquet")
    frame, _, _ = files.read(tmp_path / "w.parquet")
    assert frame["well"].tolist() == ["w1", "w2", "w3"]


# ---- bad files ----------------------------------------------------------------------------------


def message(path: Path) -> tuple[str, str]:
    with pytest.raises(InputError) as caught:
        files.read(path)
    return str(caught.value), caught.value.hint


def test_not_found_offers_a_near_name(tmp_path: Path) -> None:
    written(tmp_path, "a,b\n1,2\n", "wells.csv")
    said, hint = message(tmp_path / "well.csv")
    assert said.startswith("there is no file well.csv in ")
    assert hint == "In that folder there is ‘wells.csv’."
    said, _ = message(tmp_path / "nowhere" / "wells.csv")
    assert said.startswith("there is no folder ")


def test_a_folder_is_not_a_file(tmp_path: Path) -> None:
    (tmp_path / "x.csv").mkdir()
    said, hint = message(tmp_path / "x.csv")
    assert said.endswith("is a folder")
    assert hint == "Name one file in it."


def test_unknown_suffix_lists_what_is_read(tmp_path: Path) -> None:
    said, hint = message(written(tmp_path, "x", "data.sav"))
    assert said == "data.sav has the suffix .sav, which is not read here"
    assert ".csv" in hint
    assert ".parquet" in hint
    assert ".dta" in hint


@pytest.mark.parametrize(
    ("name", "content", "said"),
    [
        ("e.csv", b"", "e.csv is empty"),
        ("e.csv", b" \n\n", "e.csv is empty"),
        ("e.csv", b"a,b\n", "e.csv has a header line and no rows"),
        ("e.csv", b"PK\x03\x04\x00\x00", "e.csv is not a text file (it holds zero bytes)"),
        ("e.csv", b"y,x,y\n1,2,3\n", "column names occur more than once: ‘y’ (columns 1 and 3)"),
        (
            "e.csv",
            b"a,b\n1,2\n3,4,5\n",
            "1 row of e.csv has another number of fields than the header's 2: row 2 has 3",
        ),
        (
            "e.csv",
            b"a,b\n1,2\n3\n",
            "1 row of e.csv has another number of fields than the header's 2: row 2 has 1",
        ),
        ("e.parquet", b"not this", "e.parquet is not a readable Parquet file"),
        ("e.xlsx", b"not this", "e.xlsx is not a readable Excel file"),
        ("e.dta", b"not this at all", "e.dta is not a readable Stata file"),
        ("e.csv.gz", b"not this", "e.csv.gz is not a whole gzip file"),
    ],
)
def test_unreadable(tmp_path: Path, name: str, content: bytes, said: str) -> None:
    assert message(written(tmp_path, content, name))[0].startswith(said)


def test_repeated_names_in_excel(tmp_path: Path) -> None:
    pd.DataFrame([["y", "y"], [1, 2]]).to_excel(tmp_path / "w.xlsx", index=False, header=False)
    assert message(tmp_path / "w.xlsx")[0] == "column names occur more than once: ‘y’ (columns 1 and 2)"


def test_a_folder_is_called_a_folder(tmp_path: Path) -> None:
    with pytest.raises(InputError, match="is a folder"):
        files.read(tmp_path)
