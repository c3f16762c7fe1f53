"""A strict reader of the little LaTeX that reports write: what it passes, LaTeX sets. Loaded by path, as tests are no package."""

import re
from pathlib import Path

TEXT = set("\\ & % $ # _ { } ' ` \" ^ ~ r v c u = . H".split(" ")) | {" "}
TEXT |= set("textasciitilde textasciicircum textbackslash dots ss o O ae AE aa AA l L i".split())
TEXT |= set("begin end caption label centering input includegraphics cite ref bibliography bibliographystyle".split())
TEXT |= set("documentclass usepackage title author maketitle section setcounter renewcommand arraystretch textfraction topfraction".split())
TEXT |= set(
    "small smallskip setlength tabcolsep dbltopfraction hline toprule midrule bottomrule dbltopnumber topnumber totalnumber".split()
)
MATH = set("mathrm pm times le ge to infty cdot approx hat ln , Omega Lambda Delta Sigma sigma chi rho mu alpha beta gamma ".split())
MATH |= set("lambda widehat % & # _".split()) | {" "}
ENVIRONMENTS = {"document", "table", "table*", "figure", "figure*", "tabular"}
TOKEN = re.compile(r"\\([A-Za-z]+\*?|.)|([{}$&_^#~<>|\"%])|(\n)|([^\\{}$&_^#~<>|\"\n%]+)", re.DOTALL)


class Wrong(AssertionError):
    """The text is not LaTeX that we would print."""


def check(text, where="text"):
    """Raise Wrong for anything that LaTeX would stop at or set otherwise than meant."""
    if not text.isascii():
        raise Wrong(f"{where}: {[c for c in text if not c.isascii()][0]!r} is outside ASCII")
    text = re.sub(r"(?m)^%.*", "", text)
    depth, math, open_ = 0, False, []
    for token in TOKEN.finditer(text):
        command, special, _, _ = token.groups()
        at = f"{where}, row {text.count(chr(10), 0, token.start()) + 1}: …{text[max(0, token.start() - 30) : token.end() + 20]!r}"
        if command is not None:
            known = MATH if math else TEXT
            if command not in known:
                raise Wrong(f"{at}: \\{command} is not known in {'math' if math else 'text'}")
            if command in ("begin", "end"):
                _environment(command, text[token.end() :], open_, at)
        elif special in ("{", "}"):
            depth += 1 if special == "{" else -1
            if depth < 0:
                raise Wrong(f"{at}: a brace is closed that was not opened")
        elif special == "$":
            math = not math
        elif special in ("_", "^") and not math and not _in_argument(text, token.start()):
            raise Wrong(f"{at}: {special} outside math")
        elif special == "&" and "tabular" not in open_ or special in ("#", '"') and not math or special == "%":
            raise Wrong(f"{at}: {special} must be escaped")
        elif special in ("<", ">", "|") and not math:
            raise Wrong(f"{at}: {special} prints as something else outside math")
    if depth or math or open_:
        raise Wrong(f"{where}: not closed: {depth} braces, math {math}, environments {open_}")
    for spec, body in re.findall(r"\\begin\{tabular\}\{([lcr]+)\}(.*?)\\end\{tabular\}", text, re.DOTALL):
        _rows(spec, body, where)


def _environment(command, rest, open_, at):
    name = re.match(r"\{([^}]*)\}", rest)
    if name is None or name.group(1) not in ENVIRONMENTS:
        raise Wrong(f"{at}: unknown environment")
    if command == "begin":
        open_.append(name.group(1))
    elif not open_ or open_.pop() != name.group(1):
        raise Wrong(f"{at}: environments do not match")


def _in_argument(text, position):
    """Whether a place is inside the argument of a command that takes a name: file, label, key."""
    before = text[:position]
    return re.search(r"\\(label|ref|cite|input|includegraphics|bibliography)(\[[^]]*\])?\{[^}]*$", before) is not None


def _rows(spec, body, where):
    body = re.sub(r"\\(toprule|midrule|bottomrule|hline)", "", body)
    *rows, rest = body.split("\\\\")
    if rest.strip():
        raise Wrong(f"{where}: a row does not end: {rest.strip()!r}")
    for row in rows:
        cells = len(re.findall(r"(?<!\\)&", row)) + 1
        if cells != len(spec):
            raise Wrong(f"{where}: {cells} cells in a table of {len(spec)} columns: {row.strip()!r}")


def check_folder(folder, main="manuscript.tex"):
    """Check a manuscript with all that it includes: files, labels, citations, and every text by itself."""
    folder = Path(folder)
    text = (folder / main).read_text()
    inputs = re.findall(r"\\input\{([^}]*)\}", text)
    whole = text + "".join((folder / name).read_text() for name in inputs)
    for name in [main, *inputs]:
        check((folder / name).read_text(), name)
    for name in re.findall(r"\\includegraphics\{([^}]*)\}", whole):
        assert (folder / name).read_bytes().startswith(b"%PDF"), name
    labels = re.findall(r"\\label\{([^}]*)\}", whole)
    assert len(labels) == len(set(labels)), labels
    assert set(re.findall(r"\\ref\{([^}]*)\}", whole)) <= set(labels)
    keys = {key for group in re.findall(r"\\cite\{([^}]*)\}", whole) for key in group.split(",")}
    entries = bibliography_keys((folder / "references.bib").read_text())
    assert keys == set(entries), keys ^ set(entries)


def bibliography_keys(text):
    """Keys of a BibTeX file; its braces must match, and each entry needs author, title and year."""
    if not text.isascii():
        raise Wrong("the bibliography is not ASCII")
    entries = re.split(r"(?m)^@", text)[1:]
    keys = []
    for entry in entries:
        head = re.match(r"(\w+)\{([\w-]+),\n", entry)
        if head is None or entry.count("{") != entry.count("}"):
            raise Wrong(f"this entry is broken: {entry[:60]!r}")
        for field in ("author", "title", "year"):
            if not re.search(rf"(?m)^  {field} = \{{.+\}},?$", entry):
                raise Wrong(f"{head.group(2)} has no {field}")
        keys.append(head.group(2))
    if len(set(keys)) != len(keys):
        raise Wrong("a key is given twice")
    return keys
