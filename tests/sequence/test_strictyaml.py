"""YAML is read as YAML 1.2 means it, or refused with the line."""

import pytest
import yaml
from hypothesis import given
from hypothesis import strategies as st

from planner.errors import DocumentError
from planner.sequence import strictyaml

# YAML 1.2.2, section 10.3.2 (core schema), and what YAML 1.1 makes of the same text (measured, PyYAML 6.0)
CORE_SCHEMA = [
    ("12:30:05", "12:30:05"),  # 45005 under 1.1
    ("-5:23:28", "-5:23:28"),  # -19408 under 1.1
    ("1e-3", 0.001),  # text under 1.1
    ("017", 17),  # 15 under 1.1
    ("0o17", 15),  # text under 1.1
    ("0x1F", 31),
    ("1_000", "1_000"),  # 1000 under 1.1
    ("yes", "yes"),  # true under 1.1
    ("off", "off"),
    ("2032-11-13", "2032-11-13"),  # a date under 1.1
    ("2032-11-13T06:41:12Z", "2032-11-13T06:41:12Z"),
    ("true", True),
    ("~", None),
    (".5", 0.5),
    ("-.inf", float("-inf")),
    ("+12", 12),
    ("'12'", "12"),
]


@pytest.mark.parametrize(("text", "value"), CORE_SCHEMA)
def test_scalars_are_those_of_the_core_schema(text, value):
    found = strictyaml.parse(f"key: {text}").data["key"]
    assert found == value
    assert type(found) is type(value)


@pytest.mark.parametrize(
    ("text", "line", "says"),
    [
        ("a: 1\nb: 2\na: 3\n", 3, "twice (first on line 1)"),
        ("a:\n  b: 1\n  b: 2\n", 3, "a.b"),
        ("a: &x 1\nb: *x\n", 2, "alias *x"),
        ("a: !!python/object/apply:os.system ['true']\n", 1, "tag"),
        ("a: 1\n---\nb: 2\n", 2, "another document"),
        ("a: [1, 2\n", 2, "file"),
        ("? [1, 2]\n: 3\n", 1, "a key that is not text"),
        ("a: !!int twelve\n", 1, "'twelve'"),
        ("- " * 100 + "1", 1, "very deep nesting"),
        ("[" * 5000, 1, "nesting"),
        ("9" * 5000, 1, "9999"),
        (b"a: \xff\xfe\n", 1, "UTF-8"),
    ],
)
def test_what_is_doubtful_is_an_error_that_names_the_line(text, line, says):
    with pytest.raises(DocumentError) as told:
        strictyaml.parse(text, "brief.yaml")
    assert told.value.line == line
    assert says in str(told.value)
    assert "\n" not in str(told.value)


def test_every_key_keeps_its_line():
    document = strictyaml.parse("site:\n  name: x\n  horizon:\n  - [1, 2]\n  - [3, 4]\n")
    assert document.line(("site", "name")) == 2
    assert document.line(("site", "horizon", 1)) == 5
    assert document.line(("site", "height_m")) == 1
    assert strictyaml.dotted(("rig", "filters", 0, "name")) == "rig.filters[0].name"


def test_a_missing_file_and_a_folder_are_told_apart(tmp_path):
    with pytest.raises(DocumentError, match="nothing there"):
        strictyaml.read(tmp_path / "no.yaml")
    with pytest.raises(DocumentError, match="directory"):
        strictyaml.read(tmp_path)


scalars = st.one_of(
    st.none(),
    st.booleans(),
    st.integers(-(10**12), 10**12),
    st.floats(allow_nan=False),
    st.text(
        st.characters(blacklist_categories=("Cs", "Cc"), blacklist_characters="\x85\ufeff\u2028\u2029"),
        max_size=20,
    ),
    st.sampled_from([text for text, _ in CORE_SCHEMA if not text.startswith("'")]),
)
documents = st.dictionaries(
    st.text("abcdefgh_", min_size=1, max_size=6),
    st.recursive(
        scalars,
        lambda inner: (
            st.lists(inner, max_size=3) | st.dictionaries(st.text("ab:1", min_size=1), inner, max_size=3)
        ),
        max_leaves=8,
    ),
    max_size=4,
)


@given(documents)
def test_what_is_written_reads_back_equal_under_both_versions_of_yaml(data):
    text = strictyaml.dump(data)
    assert strictyaml.parse(text).data == data
    # floats such as 1.0e+22 and text such as 1e-3 must not be taken for each other by a YAML 1.1 reader either
    assert yaml.safe_load(text) == data
