"""Reading YAML: numbers, lines, and what is refused."""

import pytest

from fitter.config.yaml_file import MAX_BYTES, parse_yaml, read_yaml
from fitter.errors import InputError, InputErrors


@pytest.mark.parametrize(
    ("text", "value"),
    [
        ("1e-3", 1e-3), ("1E5", 1e5), (".5", 0.5), ("-2.", -2.0), ("+1.5e+2", 150.0), ("010", 10), ("-7", -7),
        ("0x1F", 31), ("0o17", 15), (".inf", float("inf")), ("true", True), ("False", False), ("null", None), ("~", None), ("", None),
        ("no", "no"), ("on", "on"), ("2026-12-01", "2026-12-01"), ("12:30", "12:30"), ("1_000", "1_000"), ("1,5", "1,5"), ("'1e3'", "1e3"),
    ],
)  # fmt: skip
def test_scalars_follow_yaml_1_2(text, value):
    found = parse_yaml(f"a: {text}").data["a"]
    assert found == value
    assert type(found) is type(value)


def test_lines_lead_to_keys_and_items():
    document = parse_yaml("a:\n  b: 1\n  c:\n    - x\n    - {d: 2,\n       e: 3}\n")
    assert [document.line(k) for k in [("a",), ("a", "b"), ("a", "c", 1), ("a", "c", 1, "d"), ("a", "c", 1, "e")]] == [1, 2, 5, 5, 6]
    assert document.line(("a", "c", 0, "nothing")) == 4
    assert document.line(("nothing",)) is None


def test_byte_order_marks_and_other_encodings(tmp_path):
    for name, encoding in (("bom", "utf-8-sig"), ("sixteen", "utf-16")):
        path = tmp_path / f"{name}.yaml"
        path.write_bytes("title: Ωm\n".encode(encoding))
        assert read_yaml(path).data == {"title": "Ωm"}


def test_a_key_given_twice_is_refused_with_both_lines():
    with pytest.raises(InputErrors) as caught:
        parse_yaml("a: 1\nb: {c: 1, c: 2}\nd: 0\na: 3\n")
    inner, outer = caught.value.errors
    assert "on lines 2 and 2" in inner.problem
    assert inner.key == "b.c"
    assert (outer.row, outer.key) == (4, "a")
    assert "on lines 1 and 4" in outer.problem


@pytest.mark.parametrize(
    ("text", "row", "words"),
    [
        ("a: 1\n\tb: 2\n", 2, "spaces, not with tabs"),
        ("a: 1\nb:2\nc: 3\n", 3, "not valid YAML"),
        ("a: [1, 2\nb: 3\n", 2, "not valid YAML"),
        ("a: 1\nb: @x\n", 2, "in quotes"),
        ("a: !!python/object/apply:os.system ['true']\n", 1, "YAML tag"),
        ("a: !!int many\n", 1, "does not fit its YAML tag"),
        ("a: 1\n---\nb: 2\n", 2, "more than one YAML document"),
        ("- a\n- b\n", 1, "list of `key: value` lines"),
        ("z mu sigma\n0.1 38 0.1\n", 1, "list of `key: value` lines"),
        ("? [a]\n: 1\n", 1, "a key must be a word"),
        ("a: 1\nb: \x01\n", 2, "control character"),
        ('a: 1\nb: "x\\0y"\n', 2, "no text can hold"),
        ('a: 1\n"b\\uD800": 2\n', 2, "no text can hold"),
    ],
)
def test_what_is_no_config_is_refused(text, row, words):
    with pytest.raises(InputError) as caught:
        parse_yaml(text)
    assert words in str(caught.value)
    assert caught.value.row == row


def test_empty_missing_folder_and_large(tmp_path):
    def message(path):
        with pytest.raises(InputError) as caught:
            read_yaml(path)
        return str(caught.value)

    (tmp_path / "empty.yaml").write_text("# nothing\n")
    (tmp_path / "large.yaml").write_bytes(b"#" * (MAX_BYTES + 1))
    (tmp_path / "latin.yaml").write_bytes(b"a: 1\ntitle: \xe9t\xe9\n")
    (tmp_path / "run").mkdir()
    assert "the config is empty" in message(tmp_path / "empty.yaml")
    assert "larger than 1 MB" in message(tmp_path / "large.yaml")
    assert "row 2: the file is not UTF-8 text" in message(tmp_path / "latin.yaml")
    assert "this is a folder" in message(tmp_path / "run")
    (tmp_path / "run" / "config.yaml").touch()
    assert f"Did you mean {tmp_path / 'run' / 'config.yaml'}?" in message(tmp_path / "run")
    assert f"Did you mean {tmp_path / 'empty.yaml'}?" in message(tmp_path / "emtpy.yaml")
    assert "does not exist" in message(tmp_path / "nowhere" / "a.yaml")


def test_aliases_cannot_blow_up_or_bite_their_tail():
    bomb = "a: &a [x,x,x,x,x,x,x,x,x,x]\n" + "".join(
        f"{new}: &{new} [{','.join(10 * [f'*{old}'])}]\n" for old, new in zip("abcdefg", "bcdefgh", strict=True)
    )
    for text in (bomb, "a: &a [*a]\n", "a: " + 400 * "[" + 400 * "]"):
        with pytest.raises(InputError, match="nested too deeply"):
            parse_yaml(text)
    assert parse_yaml("a: &p {uniform: [0, 1]}\nb: *p\n").data["b"] == {"uniform": [0, 1]}
