"""Studies, tables and series made by their grammar, and the same harmed: by value, by key and by text."""

from collections.abc import Callable

from hypothesis import strategies as st

from cohort.study.keys import KEYS, Key

EXTREME = st.sampled_from(
    ["0", "-0.0", "-1", "1", "1e-300", "5e-324", "1e308", "1e999", "-1e999", "nan", "inf", "1000000000000000000",
     "9223372036854775808", "0x" + "f" * 5000, "0.05", "16", "1e9", "366"]
)  # fmt: skip
ODD = st.sampled_from(
    ["true", "[]", "{}", '""', '"\\u0000"', '"\\u001b[31m"', '"a\\nb"', "[[1]]", "[{}]", "{ a = 1 }", "1979-05-27", '"../x"',
     '"/dev/zero"', '"<script>alert(1)</script>"', "'$\\frac{$'", '"\\uFFFF"', '"' + "x" * 3000 + '"', '"1e999 h"', '"-5 %"']
)  # fmt: skip
LETTERS = st.text(alphabet='ab01_.- "\\[]{}=,#\n\r\t\x00\ufeff\u2028µ', max_size=12)


def numbers(key: Key) -> st.SearchStrategy[float]:
    """Numbers within the key's range, its ends among them."""
    low, high = max(key.low, -1e6), min(key.high, 1e6)
    return st.sampled_from([low, high, low + 0.5 * (high - low)]) | st.floats(low, high)


def values(key: Key) -> st.SearchStrategy[str]:
    """A value that the key's kind and range allow, as TOML writes it."""
    if key.kind == "yes/no":
        return st.sampled_from(["true", "false"])
    if key.kind == "whole":
        return st.integers(max(int(key.low), 0), int(min(key.high, 1e6))).map(str)
    if key.kind == "word":
        return st.sampled_from(key.words or ("hepatic-lag",)).map(repr)
    if key.kind in ("text", "texts"):
        word = st.sampled_from(["a", "b", "td", "Rm", "people.csv", "growth_per_min"]).map(repr)
        return word if key.kind == "text" else st.lists(word, max_size=3).map(lambda ws: f"[{', '.join(ws)}]")
    if key.kind in ("quantities", "numbers", "outcomes"):
        return st.lists(numbers(key).map(repr), max_size=4).map(lambda ns: f"[{', '.join(ns)}]")
    unit = key.units[0] if key.units and key.units[0] != "parameter" else ""
    return numbers(key).map(lambda x: f"'{x!r} {unit}'" if unit not in ("", "1") else repr(x))


def path_of(draw: Callable[..., str], key: Key) -> str:
    """The key's dotted path with names where any may stand."""
    name = draw(st.sampled_from(["td", "Rm", "C4", "a.glucose_mean_mg_dl", "other"]))
    return key.path.replace("*", f"'{name}'")


@st.composite
def assignments(draw: Callable[..., str], wild: bool) -> tuple[str, str, str]:
    """(table's header, key, value) of any key; with `wild` the value may be anything."""
    key = draw(st.sampled_from([k for k in KEYS.values() if k.kind not in ("table", "tables")]))
    value = draw((EXTREME | ODD | values(key)) if wild else values(key))
    head, _, last = path_of(draw, key).rpartition(".")
    return head, last, value


@st.composite
def studies(draw: Callable[..., list[tuple[str, str, str]]], wild: bool = True) -> str:
    """A study of a few good lines and any others of the schema, each table once, in any order."""
    tables: dict[str, dict[str, str]] = {
        "": {"seed": "1"}, "subjects": {"count": "16"}, "arms[]": {"name": "'a'", "duration": "'10 h'"},
        "subjects.parameters": {"td": "{ lognormal = { median = 36, cv = 0.2 } }"},
    }  # fmt: skip
    for head, key, value in draw(st.lists(assignments(wild), max_size=8)):
        tables.setdefault(head, {})[key] = value
    text = "".join(f"{key} = {value}\n" for key, value in tables.pop("").items())
    for head, lines in tables.items():
        name = head.replace("[]", "")
        text += f"[[{name}]]\n" if head.endswith("[]") else f"[{name}]\n"
        text += "".join(f"{key} = {value}\n" for key, value in lines.items())
    return text


@st.composite
def harmed(draw: Callable[..., str], whole: str) -> bytes:
    """A text with a few pieces cut, doubled or put in, in one of several encodings."""
    text = whole
    for _ in range(draw(st.integers(1, 4))):
        at, cut = draw(st.integers(0, len(text))), draw(st.integers(0, 20))
        text = text[:at] + draw(st.one_of(LETTERS, EXTREME, ODD, st.just(text[at : at + cut] * 3))) + text[at + cut :]
    encoding = draw(st.sampled_from(["utf-8", "utf-8", "utf-8", "utf-8-sig", "utf-16", "latin-1"]))
    return text.encode(encoding, "replace")


CELL = st.one_of(
    st.floats(0, 300).map(repr), EXTREME, st.sampled_from(["", "NA", "<5", "1,5", '"', "x\x1b[2J", "é", "-", "1_0"])
)


@st.composite
def series(draw: Callable[..., list[str]]) -> bytes:
    """A series file: a header that may be right, and rows of cells that may be."""
    head = draw(st.permutations(["time (min)", "subject", "glucose (mg/dL)", "insulin (pmol/L)"]))
    mark = draw(st.sampled_from([",", ";", "\t"]))
    rows = [draw(st.lists(CELL, min_size=len(head), max_size=len(head))) for _ in range(draw(st.integers(0, 12)))]
    return "\n".join(mark.join(row) for row in (head, *rows)).encode()


@st.composite
def people(draw: Callable[..., list[str]]) -> bytes:
    """A table of subjects: known and unknown columns, cells of any kind."""
    head = draw(
        st.lists(st.sampled_from(["td", "Rm", "id", "stratum", "person", "body_weight_kg", "tdd", ""]), max_size=4)
    )
    rows = [draw(st.lists(CELL, min_size=len(head), max_size=len(head))) for _ in range(draw(st.integers(0, 6)))]
    return "\r\n".join(",".join(row) for row in (head, *rows)).encode("utf-8", "replace")
