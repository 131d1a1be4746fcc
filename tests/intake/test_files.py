"""What a file holds is told, and nothing becomes a number in silence."""

from __future__ import annotations

import gzip
import sys
from pathlib import Path

import geopandas as gpd
import numpy as np
import pandas as pd
import pyreadstat
import pytest
import shapely
from hypothesis import given
from hypothesis import strategies as st

from clingstone.intake import delimited, files, words
from clingstone.intake.columns import fingerprint
from clingstone.intake.frames import of_source
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


def read(
    path: Path, *columns: str, sheet: str | None = None
) -> tuple[pd.DataFrame, dict[str, str], tuple[str, ...]]:
    """The columns of a file, by default all, how it was read, and notes."""
    found = files.source(path, sheet)
    frame, told = found.read(columns or found.names)
    return frame, dict(found.origin), (*found.notes, *told)


def written(folder: Path, content: bytes | str, name: str = "table.csv") -> Path:
    path = folder / name
    path.write_bytes(content if isinstance(content, bytes) else content.encode())
    return path


def test_semicolons_decimal_comma_and_a_mark_are_sniffed_and_told(tmp_path: Path) -> None:
    path = written(tmp_path, b"\xef\xbb\xbfwell;depth\nw1;3,5\nw2;12\n")
    frame, origin, _ = read(path)
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
    frame, origin, _ = read(path)
    assert origin["separator"] == word
    assert frame.to_dict("list") == {"a": [1, 3], "b": [2.5, 4.5]}


def test_another_encoding_is_read_and_told(tmp_path: Path) -> None:
    path = written(tmp_path, "räume;y\nMühle;1\nHof;2\n".encode("cp1252"))
    frame, origin, notes = read(path)
    assert frame["räume"].tolist() == ["Mühle", "Hof"]
    assert origin["encoding"] == "windows-1252"
    assert "not UTF-8 (line 1)" in notes[0]


def test_utf_16(tmp_path: Path) -> None:
    frame, origin, _ = read(written(tmp_path, "a,ü\n1,2\n".encode("utf-16")))
    assert origin["encoding"] == "utf-16"
    assert list(frame.columns) == ["a", "ü"]


def test_leading_zeros_stay_text(tmp_path: Path) -> None:
    frame, _, notes = read(written(tmp_path, "id,y\n001,1\n010,2\n"))
    assert frame["id"].tolist() == ["001", "010"]
    assert notes == ("id has leading zeros (‘001’ and ‘010’), so it is kept as text.",)


def test_a_column_with_one_odd_value_is_left_as_text(tmp_path: Path) -> None:
    frame, _, _ = read(written(tmp_path, "y,x\n1,2\n<0.1,3\n4,5\n"))
    assert frame["y"].tolist() == ["1", "<0.1", "4"]
    assert frame["x"].tolist() == [2, 3, 5]


def test_thousands_marks_are_not_guessed(tmp_path: Path) -> None:
    frame, _, _ = read(written(tmp_path, "y;x\n1.234,5;1\n20,5;2\n"))
    assert frame["y"].tolist() == ["1.234,5", "20,5"]


def test_missing_codes(tmp_path: Path) -> None:
    frame, _, notes = read(written(tmp_path, "y,arm\n1,None\nNA,b\n.,\n,n/a\n5,NaN\n"))
    assert np.isnan(frame["y"]).tolist() == [False, True, True, True, False]
    assert frame["arm"].isna().tolist() == [False, False, True, False, True]
    assert "‘.’ in y is read as missing (1 row)." in notes
    assert "‘None’ in arm is kept as a value of its own." in notes
    assert "‘NaN’ in arm is read as missing (1 row)." in notes


def test_quoted_fields_may_hold_separators_and_line_ends(tmp_path: Path) -> None:
    frame, _, _ = read(written(tmp_path, 'a,b\n"x,y",2\n"q\nr",3\n'))
    assert frame["a"].tolist() == ["x,y", "q\nr"]


def test_long_whole_numbers_are_exact(tmp_path: Path) -> None:
    frame, _, _ = read(written(tmp_path, "id,y\n900719925474099311,1\n900719925474099312,2\n"))
    assert frame["id"].tolist() == [900719925474099311, 900719925474099312]


def test_decimals_are_read_back_to_their_last_bit(tmp_path: Path) -> None:
    given = np.random.default_rng(12).normal(size=2000) * 10.0 ** np.arange(-10, 10).repeat(100)
    pd.DataFrame({"y": given}).to_csv(tmp_path / "w.csv", index=False)
    assert read(tmp_path / "w.csv")[0]["y"].tolist() == given.tolist()


def test_only_named_columns_are_kept(tmp_path: Path) -> None:
    frame, _, _ = read(written(tmp_path, "a,b,c\n1,2,3\n"), "c", "a", "not there")
    assert list(frame.columns) == ["a", "c"]


def test_gzip(tmp_path: Path) -> None:
    frame, _, _ = read(written(tmp_path, gzip.compress(b"a,b\n1,2\n"), "t.csv.gz"))
    assert frame.to_dict("list") == {"a": [1], "b": [2]}


def test_formats_with_equal_values_have_one_fingerprint(tmp_path: Path, wells: pd.DataFrame) -> None:
    wells.to_csv(tmp_path / "w.csv", index=False)
    wells.to_csv(tmp_path / "w.tsv", index=False, sep="\t")
    wells.to_parquet(tmp_path / "w.parquet")
    wells.to_excel(tmp_path / "w.xlsx", index=False)
    wells.assign(open=wells["open"].astype("int8")).to_stata(tmp_path / "w.dta", write_index=False)
    marks = set()
    for name in ("w.csv", "w.tsv", "w.parquet", "w.xlsx", "w.dta"):
        frame, origin, _ = read(tmp_path / name)
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
    frame, origin, notes = read(tmp_path / "w.xlsx")
    assert origin["sheet"] == "readings"
    assert frame["visits"].tolist() == [1, 2, 3]
    assert notes == (
        "w.xlsx has 2 sheets; ‘readings’, the first, is read (‘old’ is not). Another is named with sheet=.",
    )


def test_stata_value_labels_become_levels(tmp_path: Path) -> None:
    made = pd.DataFrame(
        {"arm": pd.Categorical(["low", "high", "low"], categories=["low", "high"]), "y": [1.0, 2, 3]}
    )
    made.to_stata(tmp_path / "w.dta", write_index=False)
    frame, _, _ = read(tmp_path / "w.dta")
    assert frame["arm"].astype(str).tolist() == ["low", "high", "low"]


def test_an_index_of_a_parquet_file_becomes_a_column(tmp_path: Path, wells: pd.DataFrame) -> None:
    wells.set_index("well").to_parquet(tmp_path / "w.parquet")
    frame, _, _ = read(tmp_path / "w.parquet")
    assert frame["well"].tolist() == ["w1", "w2", "w3"]


# ---- columns in one go ---------------------------------------------------------------------------

WORDS = (
    "1", "2.5", "-3", "1e5", "007", "-03", "0", "0.5", " 4", "NA", "", ".", "NaN", "None", "x", "True", "inf",
    "9007199254740993", "99999999999999999999", "900719925474099311",
)  # fmt: skip


@given(st.lists(st.sampled_from(WORDS), min_size=1, max_size=6), st.integers(0, 3))
def test_columns_read_as_numbers_at_once_are_those_of_their_text(given: list[str], ahead: int) -> None:
    """The quick way against the plain one: every word looked at, whatever the first rows promised."""
    column = ["5"] * (delimited.SAMPLE * min(ahead, 1) + ahead) + given
    content = "v,w\n" + "".join(f"{v},1\n" for v in column)
    text = delimited.look(content.encode(), "t.csv")
    frame, notes = text.read(["v"])
    told: list[str] = []
    plain = words.typed(pd.Series(column, name="v"), ".", told)
    assert text.rows == len(column)
    assert sorted(notes) == sorted(told)
    pd.testing.assert_series_equal(frame["v"], plain, check_dtype=False)
    assert (frame["v"].dtype.kind in "if") is (plain.dtype.kind in "if")


@given(
    st.lists(
        st.lists(st.sampled_from(["a", "1", "", '"q,r"', '"q""r"', '5" pipe', "é", '"s\nt"']), max_size=4),
        min_size=1,
        max_size=6,
    ),
    st.sampled_from(["\n", "\r\n"]),
)
def test_lines_counted_at_once_are_those_of_the_standard_library(rows: list[list[str]], end: str) -> None:
    block = end.join(",".join(r) for r in rows).encode()
    found = delimited._equal_lines(block, ord(","), 2) if block else None
    if found is None:  # the standard library is asked
        return
    assert delimited._by_reader(block, ",", 2, "t.csv") == found


def test_whole_numbers_too_long_for_a_number_stay_text(tmp_path: Path) -> None:
    frame, _, notes = read(written(tmp_path, "id,y\n900719925474099311,1\n,2\n"))
    assert frame["id"].tolist()[0] == "900719925474099311"
    assert notes[0].startswith("id has whole numbers too long to be held exactly (‘900719925474099311’)")


def test_a_word_far_down_makes_the_column_text(tmp_path: Path) -> None:
    many = "".join(f"{i},1\n" for i in range(3 * delimited.SAMPLE))
    frame, _, _ = read(written(tmp_path, "a,b\n" + many + "<5,1\n"))
    assert frame["a"].iloc[[0, -1]].tolist() == ["0", "<5"]
    assert frame["b"].dtype == np.int64


@pytest.mark.parametrize("suffix", ["csv", "parquet", "feather", "xlsx", "dta", "sav"])
def test_no_column_is_read_that_nobody_asks_for(tmp_path: Path, wells: pd.DataFrame, suffix: str) -> None:
    path = tmp_path / f"w.{suffix}"
    save = {
        "csv": lambda: wells.to_csv(path, index=False),
        "parquet": lambda: wells.to_parquet(path),
        "feather": lambda: wells.to_feather(path),
        "xlsx": lambda: wells.to_excel(path, index=False),
        "dta": lambda: pyreadstat.write_dta(wells.astype({"open": "int8"}), path),
        "sav": lambda: pyreadstat.write_sav(wells.astype({"open": "int8"}), path),
    }
    save[suffix]()
    found = files.source(path)
    assert found.names == tuple(wells.columns)
    assert found.rows == 3
    assert list(found.read(["visits", "well"])[0].columns) == ["well", "visits"]
    later = of_source(found).holding(["visits"])
    assert later.column("depth", "asked for later")[:2].tolist() == [3.5, 12.0]


# ---- statistical packages, maps ------------------------------------------------------------------


def clinics() -> pd.DataFrame:
    return pd.DataFrame(
        {"arm": [1.0, 2, 1, 2], "age": [30.0, 99, 41, -9], "mood": [1.0, 1, 1, 2], "y": range(4)}
    )


ARM = {"arm": {1: "usual", 2: "visits"}, "age": {99: "not known"}, "mood": {1: "low", 2: "low"}}


@pytest.mark.parametrize("suffix", ["sav", "zsav", "dta"])
def test_value_labels_become_levels_where_every_value_has_one(tmp_path: Path, suffix: str) -> None:
    path = tmp_path / f"c.{suffix}"
    if suffix == "dta":
        pyreadstat.write_dta(clinics(), path, variable_value_labels=ARM)
    else:
        missing = {"age": [-9]}
        compress = suffix == "zsav"
        pyreadstat.write_sav(
            clinics(), path, variable_value_labels=ARM, missing_ranges=missing, compress=compress
        )
    frame, origin, notes = read(path)
    assert origin["format"] == ("Stata" if suffix == "dta" else "SPSS")
    assert frame["arm"].tolist() == ["usual", "visits", "usual", "visits"]
    assert list(frame["arm"].cat.categories) == ["usual", "visits"]
    assert frame["age"][:3].tolist() == [30, 99, 41]
    values = "4" if suffix == "dta" else "3"
    assert (
        f"age has labels for 1 of its {values} values only (99 ‘not known’), so it is kept as numbers."
        in notes
    )
    assert "Two codes of mood have one label (‘low’), so its codes are kept instead of labels." in notes
    if suffix != "dta":
        assert np.isnan(frame["age"][3])
        assert "age is missing where it is −9, as the file declares." in notes
    codes = of_source(files.source(path)).codes["arm"]
    assert codes == {"usual": 1, "visits": 2}


def test_sas_transport_files(tmp_path: Path) -> None:
    pyreadstat.write_xport(clinics(), tmp_path / "c.xpt")
    frame, origin, _ = read(tmp_path / "c.xpt")
    assert origin["format"] == "SAS"
    pd.testing.assert_frame_equal(frame, clinics().astype(float))


def fields() -> gpd.GeoDataFrame:
    shapes = [shapely.box(1000 * i, 0, 1000 * (i + 1), 1000 * (i + 1)) for i in range(3)]
    return gpd.GeoDataFrame({"y": [1.0, 2.0, 3.0], "owner": list("abc")}, geometry=shapes, crs=3035)


def test_a_geopackage_without_a_reference_system_is_a_plane(tmp_path: Path) -> None:
    """GDAL stores the absence as "Undefined Cartesian SRS", which cannot be turned to an equal-area map."""
    undefined = (
        'LOCAL_CS["Undefined Cartesian SRS",UNIT["Meter",1],AXIS["Easting",EAST],AXIS["Northing",NORTH]]'
    )
    fields().set_crs(undefined, allow_override=True).to_file(tmp_path / "f.gpkg")
    assert gpd.read_file(tmp_path / "f.gpkg").crs.is_engineering
    found = of_source(files.source(tmp_path / "f.gpkg")).holding(["owner"])
    assert found.lonlat is False
    assert found.unit == ""
    assert any("reference system of the shapes is undefined" in note for note in found.notes)
    assert any("square units" in note for note in found.notes)


@pytest.mark.parametrize("suffix", ["gpkg", "geojson", "shp", "parquet"])
def test_shapes_are_places_and_their_columns_are_read_when_asked_for(tmp_path: Path, suffix: str) -> None:
    path = tmp_path / f"f.{suffix}"
    fields().to_parquet(path) if suffix == "parquet" else fields().to_file(path)
    opened = files.source(path)
    assert (opened.names, opened.rows) == (("y", "owner"), 3)
    assert opened.origin["coordinates"] == "EPSG:3035"
    table = of_source(opened).holding(["owner"])
    assert table.place == ("geometry x", "geometry y")
    assert (table.lonlat, table.unit) == (False, "m")
    assert table.column("geometry x", "place").tolist() == [500, 1500, 2500]
    assert table.column("owner", "group").tolist() == ["a", "b", "c"]
    assert table.shapes is not None
    # EPSG:3035 keeps areas: squares and oblongs of 1, 2 and 3 km².
    assert table.notes[-1] == (
        "3 shapes of a median area of 2.00 km² (from 1.00 to 3.00) are stood for by a point inside each "
        "of them."
    )


def test_layers_and_sheets_are_chosen_by_name(tmp_path: Path, wells: pd.DataFrame) -> None:
    fields().to_file(tmp_path / "f.gpkg", layer="fields")
    fields().iloc[:2].to_file(tmp_path / "f.gpkg", layer="old")
    assert files.source(tmp_path / "f.gpkg", "old").rows == 2
    first = files.source(tmp_path / "f.gpkg")
    assert first.rows == 3
    assert "‘fields’, the first, is read (‘old’ is not)" in first.notes[0]
    with pd.ExcelWriter(tmp_path / "w.xlsx") as book:
        wells.to_excel(book, sheet_name="readings", index=False)
        wells.iloc[:1].to_excel(book, sheet_name="old", index=False)
    assert len(read(tmp_path / "w.xlsx", sheet="old")[0]) == 1
    with pytest.raises(InputError, match="has no sheet ‘odl’") as caught:
        files.source(tmp_path / "w.xlsx", "odl")
    assert caught.value.hint == "Did you mean ‘old’?"
    with pytest.raises(InputError, match="holds one table only"):
        files.source(written(tmp_path, "a,b\n1,2\n"), "old")


@pytest.mark.parametrize(
    ("name", "package", "extra"),
    [
        ("t.parquet", "pyarrow", "files"),
        ("t.feather", "pyarrow", "files"),
        ("t.sav", "pyreadstat", "files"),
        ("t.dta", "pyreadstat", "files"),
        ("t.xlsx", "openpyxl", "files"),
        ("t.gpkg", "geopandas", "geo"),
    ],
)
def test_what_is_not_installed_is_named_with_its_extra(
    tmp_path: Path, monkeypatch: pytest.MonkeyPatch, name: str, package: str, extra: str
) -> None:
    pd.DataFrame({"a": [1]}).to_excel(tmp_path / "t.xlsx")
    if name != "t.xlsx":
        written(tmp_path, b"anything", name)
    monkeypatch.setitem(sys.modules, package, None)
    said, hint = message(tmp_path / name)
    assert said == f"{name} needs {package} to be read, which is not installed"
    assert hint == f"Install it with: pip install 'clingstone[{extra}]'."


# ---- bad files ----------------------------------------------------------------------------------


def message(path: Path) -> tuple[str, str]:
    with pytest.raises(InputError) as caught:
        read(path)
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
    said, hint = message(written(tmp_path, "x", "data.sas"))
    assert said == "data.sas has the suffix .sas, which is not read here"
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
        ("e.feather", b"not this", "e.feather is not a readable Feather file"),
        ("e.dta", b"not this at all", "e.dta is not a readable Stata file"),
        ("e.sav", b"not this at all", "e.sav is not a readable SPSS file"),
        ("e.gpkg", b"not this at all", "e.gpkg is not a readable GeoPackage file"),
        ("e.geojson", b"{not this", "e.geojson is not a readable GeoJSON file"),
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
        read(tmp_path)
