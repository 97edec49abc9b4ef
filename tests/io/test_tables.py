"""Tables: the promised columns, and a round trip for whatever a file can be called."""

import csv
import io
import json
import math
import string
from datetime import UTC, datetime, timedelta, timezone
from pathlib import Path

import pytest
from hypothesis import given
from hypothesis import strategies as st

from printmetrics.errors import FolderError
from printmetrics.io.tables import (
    EVENTS,
    IMAGES,
    MEASUREMENTS,
    PROFILES,
    TABLES,
    Table,
    TableWriter,
    describe_table,
    encode_rows,
    read_table,
    write_table,
)

PROMISED = {
    "measurements": "source,image,image_sha256,captured_at,lot,roll,position_m,lane,site,layer,rotation_deg,"
    "feature,kind,item,quantity,value,unit,u,u_noise,u_sampling,u_common,expanded_u,dof,"
    "lower,target,upper,verdict,flags,eval_length_um,sampling_um,"
    "revision,decision,reason,operator,measured_at,recipe,recipe_id,scale_id,software",
    "events": "image,image_sha256,lot,roll,position_m,lane,feature,item,event,x_px,y_px,x,y,md,cd,size,area,unit",
    "profiles": "image,image_sha256,feature,item,profile,distance,value,u,unit",
    "images": "image,image_sha256,status,reason,width_px,height_px,bits,seconds,measured_at",
}


@pytest.mark.parametrize("table", TABLES)
def test_columns_are_the_promised_ones_in_order(table: Table) -> None:
    assert ",".join(table.header) == PROMISED[table.name]


def test_a_table_is_rfc_4180_and_utf_8(tmp_path: Path) -> None:
    path = tmp_path / "images.csv"
    write_table(path, IMAGES, [{"image": 'a,"b"\nc.png', "status": "measured"}, {"image": "線.png"}])
    assert (
        path.read_bytes()
        == (PROMISED["images"] + '\r\n"a,""b""\nc.png",,measured,,,,,,\r\n線.png,,,,,,,,\r\n').encode()
    )


def test_a_bare_carriage_return_is_quoted(tmp_path: Path) -> None:
    write_table(tmp_path / "t.csv", IMAGES, [{"image": "a\rb.png"}])
    assert b'"a\rb.png"' in (tmp_path / "t.csv").read_bytes()
    assert read_table(tmp_path / "t.csv")[0]["image"] == "a\rb.png"


@pytest.mark.parametrize("text", ["=1+1", "+1", "-1", "@x", "\tx", "\rx", "'x", "''", "'=1"])
def test_text_that_could_be_a_formula_is_defused_and_read_back(tmp_path: Path, text: str) -> None:
    path = tmp_path / "t.csv"
    write_table(path, IMAGES, [{"image": text}])
    with path.open(encoding="utf-8", newline="") as file:
        assert list(csv.reader(file))[1][0] == "'" + text
    assert read_table(path)[0]["image"] == text


def test_a_negative_number_is_never_touched(tmp_path: Path) -> None:
    write_table(tmp_path / "t.csv", EVENTS, [{"x": -1.5, "event": "-1.5"}])
    with (tmp_path / "t.csv").open(encoding="utf-8", newline="") as file:
        (row,) = csv.DictReader(file)
    assert (row["x"], row["event"]) == ("-1.5", "'-1.5")


@pytest.mark.parametrize(
    ("value", "cell"),
    [(1 / 3, "0.333333333"), (1e-7, "1e-07"), (20, "20"), (None, ""), (math.nan, ""), (math.inf, "INF")],
)
def test_numbers_have_nine_digits_and_unknowns_are_empty(value: float | None, cell: str) -> None:
    assert encode_rows(PROFILES, [{"value": value}]).decode().split(",")[6] == cell


def test_a_table_is_read_by_its_name_as_text_too(tmp_path: Path) -> None:
    write_table(tmp_path / "t.csv", IMAGES, [{"image": "a.png"}])
    assert read_table(str(tmp_path / "t.csv")) == read_table(tmp_path / "t.csv")


def test_infinite_degrees_of_freedom_come_back(tmp_path: Path) -> None:
    write_table(tmp_path / "t.csv", MEASUREMENTS, [{"dof": math.inf}])
    assert read_table(tmp_path / "t.csv")[0]["dof"] == math.inf


ANY_TEXT = st.text(st.characters(), max_size=30) | st.text("\\ud89abcdef'=\r\n\t\",\udcff\udc80\ud800", max_size=20)


@given(texts=st.lists(ANY_TEXT, min_size=1, max_size=5))
def test_any_text_comes_back(tmp_path_factory: pytest.TempPathFactory, texts: list[str]) -> None:
    path = tmp_path_factory.mktemp("t") / "t.csv"
    write_table(path, IMAGES, [{"image": text, "reason": text} for text in texts])
    assert [(row["image"], row["reason"]) for row in read_table(path)] == [(text, text) for text in texts]


@given(text=ANY_TEXT)
def test_no_text_cell_begins_as_a_formula(text: str) -> None:
    (cells,) = csv.reader(io.StringIO(encode_rows(IMAGES, [{"image": text}]).decode(), newline=""))
    assert cells[0][:1] not in tuple("=+-@\t\r")


@given(
    number=st.none() | st.floats(allow_nan=False),
    whole=st.none() | st.integers(-(2**53), 2**53),
    when=st.none() | st.datetimes(timezones=st.just(UTC) | st.just(timezone(timedelta(hours=5, minutes=30)))),
)
def test_values_come_back_with_their_type(
    tmp_path_factory: pytest.TempPathFactory, number: float | None, whole: int | None, when: datetime | None
) -> None:
    path = tmp_path_factory.mktemp("t") / "t.csv"
    write_table(path, IMAGES, [{"seconds": number, "bits": whole, "measured_at": when}])
    (row,) = read_table(path)
    assert row["seconds"] == (None if number is None else pytest.approx(number, rel=1e-8, abs=0))
    assert row["bits"] == whole
    assert row["measured_at"] == when


def test_different_names_that_are_no_text_stay_different(tmp_path: Path) -> None:
    names = ["\udcff.png", "\\udcff.png", "\\\\udcff.png", "\\\udcff.png", "\udcfe.png"]
    write_table(tmp_path / "t.csv", IMAGES, [{"image": name} for name in names])
    with (tmp_path / "t.csv").open(encoding="utf-8", newline="") as file:
        cells = [row["image"] for row in csv.DictReader(file)]
    assert cells[0] == r"\udcff.png"
    assert len(set(cells)) == len(names)
    assert [row["image"] for row in read_table(tmp_path / "t.csv")] == names


def test_ordinary_backslashes_stay_as_they_are() -> None:
    assert encode_rows(IMAGES, [{"image": r"a\b\\c.png"}]).startswith(rb"a\b\\c.png,")


def test_rows_are_appended_below_one_header(tmp_path: Path) -> None:
    path = tmp_path / "log.csv"
    for name in ("a.png", "b.png"):
        with TableWriter(path, IMAGES) as writer:
            writer.write([{"image": name}])
            assert read_table(path, IMAGES)[-1]["image"] == name
    assert path.read_bytes().count(b"image_sha256") == 1
    assert [row["image"] for row in read_table(path)] == ["a.png", "b.png"]


@pytest.mark.parametrize("content", ["image,other\r\n", PROMISED["events"] + "\r\n", PROMISED["images"] + ",x\r\n"])
def test_other_columns_are_never_mixed(tmp_path: Path, content: str) -> None:
    path = tmp_path / "log.csv"
    path.write_bytes(content.encode())
    with pytest.raises(FolderError, match="holds other columns than those of images"):
        TableWriter(path, IMAGES)
    with pytest.raises(FolderError, match="does not have the columns of images"):
        read_table(path, IMAGES)
    assert path.read_bytes() == content.encode()


@pytest.mark.parametrize(
    ("content", "why"),
    [
        (b"a.png,,,,,,\r\n", "7 cells instead of 9"),
        (b"a.png,,,,wide,,,,\r\n", "invalid literal for int"),
        (b"a.png,,,,,,,,yesterday\r\n", "Invalid isoformat"),
        (b"\xff.png,,,,,,,,\r\n", "codec can't decode"),
        (b'"a.png,,,,,,,,\r\n', "unexpected end of data"),
    ],
)
def test_a_damaged_table_is_refused(tmp_path: Path, content: bytes, why: str) -> None:
    path = tmp_path / "images.csv"
    path.write_bytes(PROMISED["images"].encode() + b"\r\n" + content)
    with pytest.raises(FolderError, match=f"no sound table .*{why}"):
        read_table(path)


def test_a_place_that_cannot_be_written_is_told_plainly(tmp_path: Path) -> None:
    with pytest.raises(FolderError, match="cannot be written: No such file"):
        write_table(tmp_path / "nowhere" / "t.csv", IMAGES, [])
    with pytest.raises(FolderError, match="cannot be written: Is a directory"):
        TableWriter(tmp_path, IMAGES)


def test_a_failed_write_leaves_the_old_table(tmp_path: Path, monkeypatch: pytest.MonkeyPatch) -> None:
    path = tmp_path / "t.csv"
    write_table(path, IMAGES, [{"image": "old.png"}])

    def refuse(*_: object) -> None:
        raise OSError(28, "No space left on device")

    monkeypatch.setattr("os.fsync", refuse)
    with pytest.raises(FolderError, match="No space left"):
        write_table(path, IMAGES, [{"image": "new.png"}])
    assert read_table(path)[0]["image"] == "old.png"
    assert [p.name for p in tmp_path.iterdir()] == ["t.csv"]


def test_a_full_disk_is_told_plainly(tmp_path: Path, monkeypatch: pytest.MonkeyPatch) -> None:
    def refuse(*_: object) -> None:
        raise OSError(28, "No space left on device")

    with TableWriter(tmp_path / "t.csv", IMAGES) as writer:
        monkeypatch.setattr("printmetrics.io.tables._write_whole", refuse)
        with pytest.raises(FolderError, match="cannot be written: No space left"):
            writer.write([{"image": "a.png"}])


@pytest.mark.parametrize(
    ("row", "why"),
    [
        ({"picture": "a.png"}, r"has no column \['picture'\]"),
        ({"bits": 8.5}, "'bits' holds whole numbers, got 8.5"),
        ({"image": 7}, "'image' holds text, got 7"),
        ({"seconds": "long"}, "could not convert string to float"),
    ],
)
def test_a_row_that_does_not_fit_is_an_error(row: dict[str, object], why: str) -> None:
    with pytest.raises(ValueError, match=why):
        encode_rows(IMAGES, [row])


@pytest.mark.parametrize("table", TABLES)
def test_the_description_names_every_column(tmp_path: Path, table: Table) -> None:
    # Source: W3C, Metadata Vocabulary for Tabular Data.
    path = describe_table(tmp_path / f"{table.name}.csv", table)
    about = json.loads(path.read_text(encoding="utf-8"))
    assert path.name == f"{table.name}.csv-metadata.json"
    assert about["@context"] == "http://www.w3.org/ns/csvw"
    assert about["url"] == f"{table.name}.csv"
    columns = about["tableSchema"]["columns"]
    assert [column["name"] for column in columns] == table.header
    assert all(column["name"] in column["titles"] and column["dc:description"] for column in columns)
    assert {column["datatype"] for column in columns} <= {"string", "double", "integer", "dateTime"}
    assert set(about["tableSchema"].get("primaryKey", ())) <= set(table.header)


def test_a_unit_that_is_the_same_in_all_rows_is_repeated(tmp_path: Path) -> None:
    about = json.loads(describe_table(tmp_path / "e.csv", EVENTS).read_text(encoding="utf-8"))
    (column,) = (c for c in about["tableSchema"]["columns"] if c["name"] == "x_px")
    assert column["titles"] == ["x_px", "x_px [{px}]"]
    assert column["schema:unitText"] == "{px}"


def test_every_description_is_a_sentence() -> None:
    for table in TABLES:
        for column in table.columns:
            assert column.description.endswith(".")
            assert column.description[0] in string.ascii_letters + string.digits
