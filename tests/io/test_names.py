"""Names of observers that files are called after."""

import pytest

from viewshed.errors import InputError
from viewshed.io._names import LONGEST, file_name, file_names


@pytest.mark.parametrize(
    "name",
    ["Knoll", "Tårn 2", "観測点", "a.b", "-x", "_", "con air", "com", "comet1", "'so'", "a" * 150],
)
def test_names_that_can_name_a_file(tmp_path, name):
    assert file_name(name) == name
    (tmp_path / f"visible_{name}.tif").write_text(name)
    assert [p.name for p in tmp_path.iterdir()] == [f"visible_{name}.tif"]


@pytest.mark.parametrize(
    ("name", "why"),
    [
        ("", "is empty"),
        ("a/b", "holds '/'"),
        ("../a", "holds '/'"),
        ("a\\b", r"holds '\\\\'"),
        ("C:", "holds ':'"),
        ("what?", r"holds '\?'"),
        ("a|b", r"holds '\|'"),
        ("a\nb", r"holds the control character '\\n'"),
        ("a\0b", r"holds the control character '\\x00'"),
        ("a\x7fb", "holds the control character"),
        ("a\u2028b", "holds the control character"),
        ("a\udcffb", "holds the control character"),
        (".hidden", "begins with a dot"),
        ("..", "begins with a dot"),
        ("end.", "ends with a dot"),
        ("end ", "ends with a space"),
        ("NUL", "device on Windows"),
        ("con.tif", "device on Windows"),
        ("aux .x", "device on Windows"),
        ("LPT1", "device on Windows"),
        ("a" * 151, "longer than 150 bytes"),
        ("å" * 76, "longer than 150 bytes"),
    ],
)
def test_names_that_cannot(name, why):
    with pytest.raises(InputError, match=rf"^observer [^\n]*cannot name a file: [^\n]*{why}") as it:
        file_name(name)
    assert str(it.value).endswith("; rename it")
    assert len(str(it.value)) < 200


def test_the_longest_name_leaves_room_for_what_is_put_round_it():
    assert LONGEST + len(".visible_.tif-4194304-12345678-draft.tif") < 255


def test_names_side_by_side():
    assert file_names(["b", "a", "Å"]) == ["b", "a", "Å"]
    assert file_names([]) == []


@pytest.mark.parametrize(
    ("names", "why"),
    [
        (["a", "b", "a"], "observer 'a' is there twice"),
        (["North", "north"], "observer 'north' is also 'North' as"),
        (["STRASSE", "straße"], "'straße' is also 'STRASSE' as"),
        (["\u00e5", "A\u030a"], "whatever the case"),
        (["\u00e5", "a\u030a"], "whatever the case"),
    ],
)
def test_names_that_a_file_system_may_take_for_one(names, why):
    with pytest.raises(InputError, match=why + ".*; rename one$"):
        file_names(names)


def test_one_bad_name_among_many_is_named():
    with pytest.raises(InputError, match="observer 'b/c' cannot name a file"):
        file_names(["a", "b/c"])
