"""Reading logger files: layouts, clocks, bad rows and bad files."""

import numpy as np
import pandas as pd
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st

from inundate.common.errors import InputError
from inundate.stage import LoggerFiles, logger_paths, read_barometer, read_checks, read_readings, read_registry

REGISTRY = "logger_id,wetland_id,file,kind,unit,height_m,valid_from,valid_to,utc_offset\n"


def put(folder, name, text):
    path = folder / name
    path.write_bytes(text if isinstance(text, bytes) else text.encode())
    return path


def stamps(readings):
    return [str(t)[:16] for t in readings.time]


def test_plain_file_with_default_columns(tmp_path):
    """ISO times without offset take the registry's; temperature is optional."""
    path = put(tmp_path, "a.csv", "time,value,temperature_c\n2024-03-01T00:00,101.5,4.1\n2024-03-01T01:00,101.6,4.2\n")
    got = read_readings(path, {"utc_offset": "+01:00"})
    assert stamps(got) == ["2024-02-29T23:00", "2024-03-01T00:00"]
    np.testing.assert_array_equal(got.value, [101.5, 101.6])
    np.testing.assert_allclose(got.temperature_c, [4.1, 4.2], rtol=1e-6)
    assert (got.n_rows, got.n_refused) == (2, 0)


@pytest.mark.parametrize("offset", ["2", "+2", "+02:00", "UTC+2:00", "Africa/Maputo"])
def test_offsets_are_understood_in_all_their_forms(tmp_path, offset):
    """Hours, +hh:mm and zone names."""
    path = put(tmp_path, "a.csv", "time,value\n2024-03-01 02:00:00,1\n")
    assert stamps(read_readings(path, {"utc_offset": offset})) == ["2024-03-01T00:00"]


def test_time_with_its_own_offset_outranks_the_registry(tmp_path):
    """An offset may stand in every row, and differ from row to row."""
    path = put(
        tmp_path, "a.csv", "time,value\n2024-03-01T05:00:00Z,1\n2024-03-01T08:00:00+02:00,2\n2024-03-01T08:00,3\n"
    )
    got = read_readings(path, {"utc_offset": "+01:00"})
    assert stamps(got) == ["2024-03-01T05:00", "2024-03-01T06:00", "2024-03-01T07:00"]


def test_foreign_layout(tmp_path):
    """Byte order mark, lines above the header, semicolons, decimal comma, quoted names, columns named in the registry."""
    text = '\ufeffSerial number;123\nplace;"Pool, north"\n\n"Date and time";"Druck [kPa]";"Temp"\n'
    text += "2024-03-01 00:00;101,25;4,5\n2024-03-01 01:00;101,35;\n"
    path = put(tmp_path, "a.csv", text)
    row = {"time_column": "date and time", "value_column": "Druck [kPa]", "temperature_column": "Temp"}
    got = read_readings(path, row)
    np.testing.assert_array_equal(got.value, [101.25, 101.35])
    assert got.temperature_c[0] == np.float32(4.5)
    assert np.isnan(got.temperature_c[1])


@pytest.mark.parametrize("encoding", ["utf-16", "latin-1"])
def test_other_encodings(tmp_path, encoding):
    """UTF-16 with its mark, and an old single-byte degree sign in an unused column name."""
    text = "time\tvalue\ttemp °C\n2024-03-01 00:00\t1.5\t3\n2024-03-01 01:00\t2.5\t3\n"
    got = read_readings(put(tmp_path, "a.txt", text.encode(encoding)))
    np.testing.assert_array_equal(got.value, [1.5, 2.5])


def test_own_time_format(tmp_path):
    """Where times are not ISO 8601 the registry's time_format says how to read them: never guessed."""
    path = put(tmp_path, "a.csv", "time,value\n04/03/2024 13:00,1\n05/03/2024 13:00,2\n")
    got = read_readings(path, {"time_format": "%d/%m/%Y %H:%M"})
    assert stamps(got) == ["2024-03-04T13:00", "2024-03-05T13:00"]
    with pytest.raises(InputError, match=r"a\.csv: none of its 2 rows can be read \(line 2: '04/03/2024"):
        read_readings(path)


def test_bad_rows_are_counted_and_the_first_five_listed(tmp_path):
    """Line numbers are those of the file, header and blank lines counted."""
    lines = [
        "# logger",
        "time,value",
        "2024-03-01T00:00,1.0",
        "",
        "rubbish",
        "2024-03-01T01:00,x",
        "2024-13-01T00:00,1",
    ]
    lines += ["2024-03-01T02:00,2.0,9,9", "2024-03-01T03:00", "n,n", "2024-03-01T04:00,4.0", ""]
    got = read_readings(put(tmp_path, "a.csv", "\n".join(lines)))
    np.testing.assert_array_equal(got.value, [1.0, 4.0])
    assert got.n_refused == 6
    assert [n for _, n, _ in got.refused_rows] == [5, 6, 7, 8, 9]
    assert got.refused_rows[0] == ("a.csv", 5, "rubbish")
    assert got.n_rows == 8


def test_empty_value_is_missing_not_refused(tmp_path):
    """A row with a time and no value is a known hole."""
    got = read_readings(
        put(tmp_path, "a.csv", "time,value\n2024-03-01T00:00,1\n2024-03-01T01:00,\n2024-03-01T02:00,NaN\n")
    )
    assert got.n_refused == 0
    assert np.isnan(got.value[1:]).all()


def test_unsorted_repeated_and_overlapping_files(tmp_path):
    """Files by list and by pattern; the same row twice is dropped, another value at the same time is counted."""
    put(tmp_path, "p1.csv", "time,value\n2024-03-01T02:00,3\n2024-03-01T00:00,1\n2024-03-01T01:00,2\n")
    put(tmp_path, "p2.csv", "time,value\n2024-03-01T02:00,3\n2024-03-01T03:00,4\n2024-03-01T01:00,7\n")
    for path in (f"{tmp_path}/p*.csv", f"{tmp_path}/p1.csv; {tmp_path}/p2.csv"):
        got = read_readings(path)
        np.testing.assert_array_equal(got.value, [1, 2, 3, 4])
        assert (got.n_repeated, got.n_conflicting) == (1, 1)


def test_clock_that_tells_an_hour_twice_is_noticed(tmp_path):
    """The clock going back in autumn is marked; with a zone name the hour is told apart."""
    times = pd.date_range("2023-10-29 00:00", "2023-10-29 06:00", freq="30min", tz="UTC").tz_convert("Europe/Berlin")
    text = "time,value\n" + "".join(f"{t.tz_localize(None).isoformat()},{i}\n" for i, t in enumerate(times))
    path = put(tmp_path, "a.csv", text)
    got = read_readings(path, {"utc_offset": "Europe/Berlin"})
    np.testing.assert_array_equal(got.value, np.arange(13))
    np.testing.assert_array_equal(got.time, times.tz_convert("UTC").tz_localize(None).to_numpy())
    fixed = read_readings(path, {"utc_offset": "+02:00"})
    assert len(fixed.clock_back) == 1
    assert fixed.n_conflicting == 2


@given(st.permutations(range(12)), st.integers(1, 11))
@settings(max_examples=30, deadline=None)
def test_order_of_rows_and_cut_into_files_do_not_matter(tmp_path_factory, order, cut):
    """Any order in any two files gives the same readings."""
    folder = tmp_path_factory.mktemp("order")
    rows = [f"2024-03-01T{h:02d}:00,{h * 1.5}\n" for h in range(12)]
    put(folder, "a.csv", "time,value\n" + "".join(rows[i] for i in order[:cut]))
    put(folder, "b.csv", "time,value\n" + "".join(rows[i] for i in order[cut:]))
    got = read_readings(f"{folder}/a.csv;{folder}/b.csv")
    np.testing.assert_array_equal(got.value, np.arange(12) * 1.5)
    assert got.n_conflicting == 0


@pytest.mark.parametrize(
    ("text", "message"),
    [
        ("time,value\n", r"none of its 0 rows can be read \(nothing stands under"),
        ("time,value\nx,y\n", r"none of its 1 rows can be read \(line 2: 'x y'\)"),
        ("when,what\n2024-03-01,1\n", r"no line among the first 200 names the columns time, value; .* 'when,what'"),
        ("", r"the file is empty"),
        ("time,value\n2024-03-01T00:00,\n", r"none of its 1 rows can be read \(no value in any row\)"),
    ],
)
def test_file_with_nothing_readable(tmp_path, text, message):
    """One clear sentence with the file's name."""
    with pytest.raises(InputError, match=r"logger readings a\.csv: " + message):
        read_readings(put(tmp_path, "a.csv", text))


def test_file_that_is_not_there(tmp_path):
    """The path is named."""
    with pytest.raises(InputError, match=r"none\.csv: the file can't be opened"):
        read_readings(tmp_path / "none.csv")
    with pytest.raises(InputError, match="no file matches the pattern"):
        read_readings(f"{tmp_path}/q*.csv")


def test_registry_is_read_and_sorted(tmp_path):
    """Defaults, absolute paths, periods in UTC."""
    text = REGISTRY + "B,W2,b.csv,vented,cmH2O,-0.5,,,\nA,W1,r/a1.csv;r/a2.csv,absolute,kPa,0.2,2024-05-01,,+02:00\n"
    text += "A,W1,r/a0.csv,absolute,kPa,0.1,,2024-05-01,+02:00\n"
    got = read_registry(put(tmp_path, "loggers.csv", text))
    assert got["logger_id"].tolist() == ["A", "A", "B"]
    assert got["height_m"].tolist() == [0.1, 0.2, -0.5]
    assert got["valid_from"][1] == pd.Timestamp("2024-04-30T22:00")
    assert got["file"][1] == f"{tmp_path}/r/a1.csv;{tmp_path}/r/a2.csv"


@pytest.mark.parametrize(
    ("row", "message"),
    [
        ("A,W1,a.csv,absolute,bar,0.1,,,", r"line 2: unit 'bar' is not known; use one of kPa, hPa"),
        ("A,W1,a.csv,gauge,kPa,0.1,,,", r"line 2: kind 'gauge' is not known; use one of absolute, vented, level"),
        ("A,W1,a.csv,level,kPa,0.1,,,", r"line 2: kind level with the pressure unit 'kPa'"),
        ("A,W1,a.csv,level,m,high,,,", r"line 2: height_m 'high' is not a number"),
        ("A,,a.csv,level,m,1,,,", r"line 2: wetland_id is empty"),
        ("A,W1,a.csv,level,m,1,soon,,", r"line 2: valid_from 'soon' is not an ISO 8601 time"),
        ("A,W1,a.csv,level,m,1,2024-02-01,2024-01-01,", r"valid_to 2024-01-01 is not after valid_from 2024-02-01"),
        ("A,W1,a.csv,level,m,1,,,+25:00", r"utc_offset '\+25:00' is not known"),
        ("A,W1,a.csv,level,m,1,,,Nowhere/Land", r"utc_offset 'Nowhere/Land' is not known"),
        ("A,W1,a.csv,level,m,1,,2024-06-01,\nA,W1,b.csv,level,m,1,2024-05-01,,", r"periods of logger 'A' overlap"),
    ],
)
def test_registry_refuses_bad_rows(tmp_path, row, message):
    """Line, value, rule and remedy."""
    with pytest.raises(InputError, match=r"logger registry loggers\.csv.*" + message):
        read_registry(put(tmp_path, "loggers.csv", REGISTRY + row + "\n"))


def test_registry_without_a_column(tmp_path):
    """The missing column and those seen are named."""
    with pytest.raises(InputError, match=r"column 'kind' is missing \(columns seen: logger_id, wetland_id, file\)"):
        read_registry(put(tmp_path, "loggers.csv", "logger_id,wetland_id,file\nA,B,c\n"))


def test_logger_files_read_each_logger_once_when_asked(tmp_path):
    """A mapping over the registry; several files of one logger are joined."""
    put(tmp_path, "a.csv", "time,value\n2024-03-01T00:00,1\n")
    put(tmp_path, "b.csv", "time,value\n2024-03-01T01:00,2\n")
    text = (
        REGISTRY
        + "A,W,a.csv,level,m,0,,2024-03-01T00:30,\nA,W,b.csv,level,m,0.1,2024-03-01T00:30,,\nB,W,gone.csv,level,m,0,,,\n"
    )
    files = LoggerFiles(read_registry(put(tmp_path, "loggers.csv", text)))
    assert list(files) == ["A", "B"]
    assert "B" in files
    np.testing.assert_array_equal(files["A"].value, [1, 2])
    with pytest.raises(InputError, match=r"gone\.csv"):
        files["B"]


def test_every_file_of_a_registry_is_listed(tmp_path):
    """Lists and patterns are resolved, a file that two rows share is there once."""
    for name in ("a1.csv", "a2.csv", "b.csv"):
        put(tmp_path, name, "time,value\n")
    text = REGISTRY + "A,W,a*.csv;b.csv,level,m,0,,,\nB,W,b.csv,level,m,0,,,\n"
    registry = read_registry(put(tmp_path, "loggers.csv", text))
    assert [p.name for p in logger_paths(registry)] == ["a1.csv", "a2.csv", "b.csv"]


def test_barometer_in_the_wrong_unit(tmp_path):
    """hPa in a kPa column is said so."""
    path = put(tmp_path, "b.csv", "time,pressure_kpa\n2024-03-01T00:00Z,1013.2\n2024-03-01T01:00Z,1012.9\n")
    with pytest.raises(InputError, match=r"median of 1013, but air is 40\.\.112 kPa \(it looks like hPa"):
        read_barometer(path)


def test_barometer_drops_single_wild_values(tmp_path):
    """A zero among good values is refused alone."""
    text = "time,pressure_kpa\n2024-03-01T00:00Z,101.3\n2024-03-01T01:00Z,0.0\n2024-03-01T02:00Z,101.2\n"
    got = read_barometer(put(tmp_path, "b.csv", text))
    np.testing.assert_array_equal(got.pressure_kpa, [101.3, 101.2])
    assert got.n_refused == 1


def test_checks_use_the_loggers_clock_and_refuse_rows(tmp_path):
    """Unknown logger, bad number and bad sd are refused with their line; the rest is used."""
    registry = read_registry(put(tmp_path, "loggers.csv", REGISTRY + "A,W,a.csv,level,m,0,,,+02:00\n"))
    text = "logger_id,time,stage_m,sd_m\nA,2024-03-01T12:00,0.5,0.01\nZ,2024-03-01T12:00,0.5,\nA,,0.5,\nA,2024-03-02,deep,\n"
    text += "A,2024-03-02,0.4,-1\nA,2024-03-02T00:00Z,0.45,\n"
    checks, refused = read_checks(put(tmp_path, "checks.csv", text), registry)
    assert checks["time"].tolist() == [pd.Timestamp("2024-03-01T10:00"), pd.Timestamp("2024-03-02")]
    assert [r.name for r in refused] == ["3", "4", "5", "6"]
    assert "logger_id 'Z' is not in the registry" in refused[0].reason
    assert "stage_m 'deep' is not a number" in refused[2].reason
    assert "sd_m -1 is not above 0" in refused[3].reason
