"""References that hang together: what can be told of them without a library."""

import re

import pytest

from fitter.report.citations import SHORT, bibliography

REQUIRED = {"article": {"author", "title", "journal", "volume", "pages", "year"}, "misc": {"author", "title", "year", "note"}}


def entry(key):
    text = bibliography([key])
    kind = re.match(r"@(\w+)\{" + re.escape(key) + ",", text)[1]
    return kind, dict(re.findall(r"^  (\w+) = \{(.*)\},?$", text, re.MULTILINE))


def ascii_letters(text):
    """A LaTeX name without accents, blanks and braces, in lower case."""
    return re.sub(r"[^a-z-]", "", re.sub(r"\\[a-z'\"`^]?", "", text).lower())


@pytest.mark.parametrize("key", list(SHORT))
def test_a_reference_is_whole_and_consistent(key):
    kind, fields = entry(key)
    assert REQUIRED[kind] <= set(fields) <= REQUIRED[kind] | {"doi"}
    name, year = re.fullmatch(r"([A-Za-z-]+?)(\d{4})", key).groups()
    assert fields["year"] == year and SHORT[key].endswith(year)
    authors = fields["author"].split(" and ")
    assert ascii_letters(authors[0].split(",")[0]) == name.lower()
    surname = SHORT[key].split(" et al.")[0].split(" & ")[0].split(",")[0].removesuffix(f" {year}")
    assert surname.lower().replace("é", "e").replace(" ", "") == name.lower()
    assert ("et al." in SHORT[key]) == (len(authors) > 3)
    if kind == "article":
        assert fields["volume"].isdigit()
        first, _, last = fields["pages"].partition("--")
        assert first.isdigit() and (not last or int(last) > int(first))
    if "doi" in fields:
        assert re.fullmatch(r"10\.\d{4,}/\S+", fields["doi"])


def test_braces_match():
    text = bibliography(SHORT)
    assert text.count("{") == text.count("}")
    assert len(re.findall(r"^@", text, re.MULTILINE)) == len(SHORT)
