"""Text tables of every shape a release comes in; every message names its place."""

import gzip

import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st

from fitter.errors import InputError
from fitter.sample.readers.layout import TextOptions, find_layout
from fitter.sample.tables import read_numbers, read_table

Z = [0.01, 0.5, 1.25]
MU = [33.1, 42.25, 44.5]


@pytest.fixture
def write(tmp_path):
    def _write(text, name="t.txt", encoding="utf-8"):
        path = tmp_path / name
        path.write_bytes(text if isinstance(text, bytes) else text.encode(encoding))
        return path

    return _write


def read(path, numbers=("z", "mu"), texts=(), **options):
    return read_table(path, TextOptions(**options), numbers=numbers, texts=texts, shown=path.name)


def check(table, z="z", mu="mu"):
    np.testing.assert_array_equal(table.numbers(z), Z)
    np.testing.assert_array_equal(table.numbers(mu), MU)


BODIES = {
    "csv": "name,z,mu\na,0.01,33.1\nb,0.5,42.25\nc,1.25,44.5\n",
    "csv with blanks": "name , z , mu\n a , 0.01 , 33.1\nb, 0.5 ,42.25\nc,1.25,44.5 \n",
    "tab": "name\tz\tmu\na\t0.01\t33.1\nb b\t0.5\t42.25\nc\t1.25\t44.5\n",
    "whitespace": "  name   z  mu\n a 0.01   33.1\nb 0.5 42.25  \n c\t1.25 44.5\n",
    "semicolon": "name;z;mu\na;0.01;33.1\nb;0.5;42.25\nc;1.25;44.5\n",
    "pipe": "name|z|mu\na|0.01|33.1\nb|0.5|42.25\nc|1.25|44.5\n",
    "quoted": '"name","z","mu"\n"a, of Virgo",0.01,33.1\n"b","0.5",42.25\nc,1.25,"44.5"\n',
    "quote not closed": 'name,z,mu\na",0.01,33.1\nb,0.5,42.25\nc,1.25,44.5\n',
    "header in the last comment": "# made by hand\n#name z mu\na 0.01 33.1\nb 0.5 42.25\nc 1.25 44.5\n",
    "header in an earlier comment": "# name z mu\n# no units here\n#\na 0.01 33.1\nb 0.5 42.25\nc 1.25 44.5\n",
    "header in a comment, commas": "#name, z, mu\na,0.01,33.1\nb,0.5,42.25\nc,1.25,44.5\n",
    "comments and blank lines between": "! intro\n\nname,z,mu\n\na,0.01,33.1\n% half way\nb,0.5,42.25\n   \n//\nc,1.25,44.5\n\n\n",
    "spare delimiters": "name,z,mu,\na,0.01,33.1,\nb,0.5,42.25,\nc,1.25,44.5,\n",
    "spare delimiters in the rows": "name,z,mu\na,0.01,33.1,\nb,0.5,42.25,\nc,1.25,44.5,\n",
    "trailing empties left out": "name,z,mu,host\na,0.01,33.1\nb,0.5,42.25,30\nc,1.25,44.5\n",
    "empty last column": "name\tz\tmu\thost\na\t0.01\t33.1\t\nb\t0.5\t42.25\t\nc\t1.25\t44.5\t\n",
    "signs and exponents": "name z mu\na +1.0e-2 3.31E1\nb .5 42.25\nc 1.25d0 44.5D+00\n",
    "no newline at the end": "name,z,mu\na,0.01,33.1\nb,0.5,42.25\nc,1.25,44.5",
}


@pytest.mark.parametrize("body", BODIES.values(), ids=BODIES)
@pytest.mark.parametrize("change", ["", "crlf", "bom", "gzip", "latin-1"])
def test_any_table(body, change, write):
    raw = body.encode()
    if change == "crlf":
        raw = raw.replace(b"\n", b"\r\n")
    elif change == "bom":
        raw = b"\xef\xbb\xbf" + raw
    elif change == "gzip":
        raw = gzip.compress(raw)
    elif change == "latin-1":
        raw = "# naïve\n".encode("latin-1") + raw
    table = read(write(raw))
    check(table)
    assert table.n == 3


def test_rows_know_their_line(write):
    table = read(write(BODIES["comments and blank lines between"]))
    assert table.lines.tolist() == [5, 7, 10]


@pytest.mark.parametrize("delimiter", [",", "\t", " "])
def test_without_a_header_by_position(delimiter, write):
    rows = "\n".join(delimiter.join(map(str, ("sn1", z, mu))) for z, mu in zip(Z, MU, strict=True))
    table = read(write("# one\n# two words\n" + rows), numbers=(1, 2), texts=(0,))
    check(table, 1, 2)
    assert table.columns.names is None and table.texts(0).tolist() == ["sn1"] * 3


def test_header_is_skipped_when_columns_are_mapped_by_position(write):
    check(read(write(BODIES["csv"]), numbers=(1, 2)), 1, 2)


def test_tagged_header_and_rows(write):
    text = "# c\nTYPE: survey\nNAMES: name z mu\nUNITS: - - mag\nOBJ: a 0.01 33.1\nNOTE: x\nOBJ: b 0.5 42.25\nOBJ: c 1.25 44.5\nEND:\n"
    table = read(write(text), header_tag="NAMES:", row_tag="OBJ:", texts=("name",))
    check(table)
    check(table, 1, 2)  # positions count from the first column after the tag
    assert table.texts("name").tolist() == ["a", "b", "c"] and table.lines.tolist() == [5, 7, 8]


@pytest.mark.parametrize("join", [": ", ":,"])
def test_tags_before_commas(join, write):
    text = f"HEAD{join}name,z,mu\n" + "".join(f"ROW{join}{n},{z},{mu}\n" for n, z, mu in zip("abc", Z, MU, strict=True))
    check(read(write(text), header_tag="HEAD:", row_tag="ROW:"))


def test_header_tag_alone_starts_the_table(write):
    check(read(write("anything 1 2 3\nCOLS z mu\n0.01 33.1\n0.5 42.25\n1.25 44.5\n"), header_tag="COLS"))


def test_explicit_delimiter_and_comment(write):
    text = "* note\nz:mu\n0.01:33.1\n* another\n0.5:42.25\n1.25:44.5\n"
    check(read(write(text), delimiter=":", comment="*"))


def test_words_stay_words(write):
    table = read(write("name,z,mu\n007,0.01,33.1\nNA,0.5,42.25\n1e3,1.25,44.5\n"), texts=("name",))
    assert table.texts("name").tolist() == ["007", "NA", "1e3"]


def test_empty_fields_are_nan(write):
    table = read(write("z,mu,host\n0.01,33.1,\n0.5,42.25,NaN\n1.25,44.5,--\n"), numbers=("host",))
    assert np.isnan(table.numbers("host")).all()


def test_unicode_minus_is_a_minus(write):
    assert read(write("z,mu\n0.01,\u22121.5\n0.5,2\n")).numbers("mu").tolist() == [-1.5, 2.0]


def test_thousands_of_columns(write):
    header = ",".join(f"c{i}" for i in range(5000))
    row = ",".join(str(i) for i in range(5000))
    table = read(write(f"{header}\n{row}\n{row}\n"), numbers=("c4999", "c17"))
    assert table.numbers("c4999").tolist() == [4999, 4999] and set(table.floats) == {17, 4999}


def test_header_longer_than_the_rows_is_told(write):
    table = read(write("#z mu spare\n0.01 33.1\n0.5 42.25\n1.25 44.5\n"))
    check(table)
    assert "3 names" in table.note and "2 columns" in table.note and "spare" in table.note


@given(
    values=st.lists(st.tuples(*[st.floats(-1e6, 1e6, allow_nan=False).map(lambda v: float(f"{v:.9g}"))] * 3), min_size=2, max_size=30),
    delimiter=st.sampled_from([",", ";", "\t", " ", "   "]),
    header=st.sampled_from(["plain", "comment", "none"]),
    end=st.sampled_from(["\n", "\r\n"]),
    noise=st.lists(st.sampled_from(["", "# c 1 2", "  ", "#"]), max_size=3),
)
@settings(max_examples=80, deadline=None)
def test_round_trip(values, delimiter, header, end, noise, tmp_path_factory):
    names = {"plain": ["a", "b", "c"], "comment": ["#a", "b", "c"], "none": None}[header]
    lines = [*noise, *([delimiter.join(names)] if names else [])]
    for row in values:
        lines += [delimiter.join(map(repr, row)), *noise[:1]]
    path = tmp_path_factory.mktemp("round") / "t"
    path.write_bytes(end.join(lines).encode())
    refs = ("a", "b", "c") if names else (0, 1, 2)
    table = read(path, numbers=refs)
    np.testing.assert_array_equal(np.column_stack([table.numbers(r) for r in refs]), values)


def failure(path, numbers=("z", "mu"), ask="z", **options):
    with pytest.raises(InputError) as caught:
        read(path, numbers=numbers, **options).numbers(ask)
    assert caught.value.file == path.name
    return caught.value


def test_missing_file_names_the_nearest(tmp_path):
    (tmp_path / "table.csv").write_text("z,mu\n")
    error = failure(tmp_path / "tabel.csv")
    assert "no such file" in str(error) and "Did you mean table.csv?" in error.cure and str(tmp_path) in error.cure
    error = failure(tmp_path / "none" / "t.csv")
    assert "There is no folder" in error.cure
    assert "a folder, not a file" in str(failure(tmp_path))


def test_missing_column_names_the_nearest(write):
    error = failure(write("name,zCMB,mu\na,0.1,38\nb,0.2,40\n"), ask="zcmb", numbers=("zcmb", "mu"))
    assert error.column == "zcmb" and "Did you mean zCMB?" in error.cure and "name, zCMB, mu" in error.cure
    assert "Did you mean z_CMBframe?" in failure(write("name,z_CMBframe,mu\na,0.1,38\n"), ask="zCMB", numbers=("zCMB",)).cure
    error = failure(write("0.1 38\n0.2 40\n"), ask=5, numbers=(5,))
    assert error.column == 5 and "Positions are 0 to 1" in error.cure
    error = failure(write("0.1 38\n0.2 40\n"))
    assert "no header" in str(error) and "0 to 1" in error.cure
    error = failure(write("z,z,mu\n0.1,1,38\n0.2,2,40\n"))
    assert "two columns have this name" in str(error)


def test_no_number_names_row_column_and_value(write):
    error = failure(write("# c\nz,mu\n0.1,38\n\noops,40\n0.3,41\nwhat,42\n"))
    assert (error.row, error.column, error.value) == (5, "z", "oops")
    assert "here and in 1 more row" in str(error)
    assert failure(write("z,mu\n0.1,38\n1_000,40\n")).value == "1_000"
    assert "True" in str(failure(write("z,mu\n0.1,38\nTrue,40\n")))


def test_decimal_comma_and_thousands(write):
    error = failure(write("z;mu\n0,01;33,1\n0,5;42,2\n"))
    assert (error.row, error.value) == (2, "0,01") and "decimal point" in error.cure
    error = failure(write("z mu\n0,01 33,1\n0,5 42,2\n"))
    assert error.value == "0,01" and "decimal point" in error.cure
    error = failure(write('z,mu\n"1,234.5",33\n0.1,42\n'))
    assert "thousands" in error.cure


def test_short_rows_that_lack_a_needed_field(write):
    path = write("name,z,mu,e,host\na,0.1,38,0.1\nb,0.2,0.1\nc,0.3,41,0.1,30\n")
    with pytest.raises(InputError) as caught:
        read_table(path, numbers=("z", "mu", "e", "host"), required=("z", "mu", "e"), shown="t.csv")
    assert str(caught.value).startswith(
        "t.csv, row 3: this line has 3 fields, the header has 5 (found 'b,0.2,0.1'). Fill in what is missing"
    )
    # The same line is no obstacle where what it lacks is not needed; a quoted comma is no delimiter.
    assert read_table(path, numbers=("z",), required=("z",)).n == 3
    path = write('name,z,mu\n"a, b",0.1\nc,0.3,41\n')
    with pytest.raises(InputError, match="this line has 2 fields, the header has 3"):
        read_table(path, numbers=("mu",), required=("mu",))


def test_short_rows_of_shifts(write):
    with pytest.raises(InputError, match="row 3: this line has 1 fields, the header has 2"):
        read_numbers(write("a,b\n0.1,0.2\n0.1\n0.1,0.3\n"))


def test_rows_of_another_length(write):
    error = failure(write("z mu e\n0.1 38 0.1\n0.2 40\n0.3 41 0.1\n"))
    assert error.row == 3 and "this line has 2 fields, the header has 3" in str(error) and error.value == "0.2 40"
    error = failure(write("z,mu\n0.1,38\n0.2,40,7\n0.3,41\n"))
    assert error.row == 3 and "this line has 3 fields, the header has 2" in str(error)
    error = failure(write("z,mu\n0.1,38,1\n0.2,40,7\n0.3,41,1\n"))
    assert error.row == 1 and "2 names" in str(error) and "3 columns" in str(error)


def test_wrong_delimiter(write):
    """Said, or found out: a delimiter that the config sets and the table does not have names the one column there is."""
    found = read(write("z,mu\n0.1,38\n0.2,40\n"), delimiter=";")
    with pytest.raises(InputError, match="one column only: is `delimiter` right"):
        found.numbers("z")
    assert read(write("z;mu\n0.1;38\n0.2;40\n"), numbers=["z"]).numbers("z").tolist() == [0.1, 0.2]


def test_integer_columns_are_numbers(write):
    assert read(write("z,mu\n1,38\n2,40\n"), numbers=["z"]).numbers("z").dtype == np.float64


def test_nothing_to_read(write):
    assert "no rows" in str(failure(write("")))
    assert "no rows" in str(failure(write("# only\n# comments\n")))
    assert "a header but no rows" in str(failure(write("z,mu\n")))
    assert "'OBJ:'" in str(failure(write("z mu\nSN: 1 2\n"), row_tag="OBJ:")) and "SN:" in failure(write("SN: 1 2\n"), row_tag="OBJ:").cure
    assert "header tag 'H:'" in str(failure(write("z mu\n1 2\n"), header_tag="H:"))
    assert "header tag 'H:'" in str(failure(write("SN: 1 2\n"), header_tag="H:", row_tag="SN:"))


def test_not_a_text_table(write):
    assert "binary data" in str(failure(write(b"\x00\x01\x02z,mu\n1,2\n")))
    raw = gzip.compress(BODIES["csv"].encode() * 50)
    error = failure(write(raw[: len(raw) // 2], "t.gz"))
    assert "damaged or cut short" in str(error)
    assert "damaged" in str(failure(write(raw[:20] + b"garbage" + raw[30:], "g.gz")))
    with pytest.raises(InputError, match="one character"):
        read(write(BODIES["csv"]), delimiter="::")


def test_absurd_size_is_refused_early(write, monkeypatch):
    monkeypatch.setattr("fitter.sample.readers.layout._MOST_CHARACTERS", 30)
    assert "absurdly large" in str(failure(write(BODIES["csv"])))


def test_shifts_from_text_and_npy(write, tmp_path):
    names, values, lines = read_numbers(write("calibration,dust\n0.01,0\n0.02,-0.01\n"))
    assert names == ["calibration", "dust"] and values.tolist() == [[0.01, 0], [0.02, -0.01]] and lines.tolist() == [2, 3]
    names, values, _ = read_numbers(write("name,a,b\nx,1,2\ny,3,4\n"), use=["b"])
    assert names == ["b"] and values.tolist() == [[2], [4]]
    with pytest.raises(InputError, match=r"not a number.*use: \[COLUMN"):
        read_numbers(write("name,a,b\nx,1,2\ny,3,4\n"))
    np.save(tmp_path / "s.npy", np.array([[1.0, 2.0], [3.0, 4.0]], dtype=">f4"))
    names, values, _ = read_numbers(tmp_path / "s.npy")
    assert names == [0, 1] and values.tolist() == [[1, 2], [3, 4]] and values.dtype == np.float64


def test_layout_tells_what_it_found(write):
    layout = find_layout(write(BODIES["tab"]), TextOptions())
    assert layout.delimiter == "\t" and layout.names == ["name", "z", "mu"] and layout.n_columns == 3
