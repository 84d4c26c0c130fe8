"""Procedures as written: every fault of a file at once, and nothing overridden silently."""

from __future__ import annotations

import pytest

from bench.errors import InputError, SpecError
from bench.procedure.text import find_procedure, load_all, load_procedure

GOOD = """
name = "mine"
title = "Mine"
[[step]]
kind = "search"
title = "Find"
[[step]]
kind = "scan"
title = "Scan"
name = "one"
"""


def write(folder, text, name="mine.toml"):
    path = folder / name
    path.write_text(text, encoding="utf-8")
    return path


def problems(folder, text):
    with pytest.raises(SpecError) as caught:
        load_procedure(write(folder, text), shipped=False)
    return {problem.path: problem for problem in caught.value.problems}


def test_the_main_job_ships_and_is_complete():
    main = find_procedure("path-equalisation", None)
    assert main.shipped
    assert [step.kind for step in main.steps] == [
        "caution", "confirm", "search", "scan", "scan", "move", "compare", "record",
    ]  # fmt: skip
    assert main.steps[0].include_bench


def test_a_labs_own_procedure_is_found_beside_the_shipped_ones(tmp_path):
    (tmp_path / "procedures").mkdir()
    write(tmp_path / "procedures", GOOD)
    assert {p.name for p in load_all(tmp_path)} == {"mine", "path-equalisation"}
    assert not find_procedure("mine", tmp_path).shipped


def test_a_file_can_be_given_by_path(tmp_path):
    assert find_procedure(str(write(tmp_path, GOOD)), None).title == "Mine"


def test_a_labs_own_file_never_stands_in_for_a_shipped_one(tmp_path):
    (tmp_path / "procedures").mkdir()
    write(
        tmp_path / "procedures", GOOD.replace("mine", "path-equalisation"), "path-equalisation.toml"
    )
    with pytest.raises(InputError, match="two procedures are called"):
        find_procedure("path-equalisation", tmp_path)


def test_an_unknown_name_says_the_nearest():
    with pytest.raises(InputError) as caught:
        find_procedure("path-equalization", None)
    assert "path-equalisation" in caught.value.mend


def test_all_faults_at_once(tmp_path):
    found = problems(
        tmp_path,
        """
        name = "mine"
        titel = "x"
        [[step]]
        kind = "serch"
        title = "a"
        [[step]]
        kind = "scan"
        title = "b"
        nam = "one"
        if_missed = "retry"
        [[step]]
        kind = "caution"
        title = 3
        text = ["ok", 4]
        include_bench = "yes"
        """,
    )
    assert found["titel"].nearest == "title"
    assert found["title"].value == "(missing)"
    assert found["step 1.kind"].nearest == "search"
    assert found["step 2.nam"].nearest == "name"
    assert found["step 2.name"].value == "(missing)"
    assert "search, reject" in found["step 2.if_missed"].allowed
    assert {"step 3.title", "step 3.text[1]", "step 3.include_bench"} <= found.keys()


@pytest.mark.parametrize(
    ("old", "new", "path"),
    [
        ('name = "one"', 'name = "one"\nif_missed = "search"', None),
        ('kind = "search"', 'kind = "record"', None),
        ('title = "Find"', 'title = "Find"\n[[step]]\nkind = "move"\ntitle = "m"\nto = "zero"',
         "step 2.to"),
        ('name = "one"',
         'name = "one"\n[[step]]\nkind = "compare"\ntitle = "c"\nscans = ["one", "oen"]',
         "step 3.scans"),
        ('name = "one"', 'name = "one"\n[[step]]\nkind = "scan"\ntitle = "c"\nname = "one"',
         "step 3.name"),
    ],
)  # fmt: skip
def test_the_order_of_steps_is_checked(tmp_path, old, new, path):
    text = GOOD.replace(old, new)
    if path is None:
        load_procedure(write(tmp_path, text), shipped=False)
    else:
        assert path in problems(tmp_path, text)


def steps(*kinds):
    """A procedure of these steps; scans are called one, two, ..., compare names the first two."""
    names = iter(("one", "two", "three", "four"))
    keys = {"move": 'to = "zero"', "compare": 'scans = ["one", "two"]', "confirm": 'text = ["t"]'}
    text = 'name = "mine"\ntitle = "Mine"\n'
    for kind in kinds:
        more = f'name = "{next(names)}"' if kind == "scan" else keys.get(kind, "")
        text += f'[[step]]\nkind = "{kind}"\ntitle = "{kind}"\n{more}\n'
    return text


TWICE = ("search", "scan", "scan")


@pytest.mark.parametrize(
    "kinds",
    [
        (*TWICE, "move", "compare"),
        (*TWICE, "move", "record", "confirm", "compare", "record"),
        ("search", "scan", "move", "scan", "move", "compare"),
        (*TWICE, "move", "compare", "move", "compare"),
        (*TWICE, "move", "compare", "scan", "move", "compare"),
        (*TWICE, "move", "record"),
        ("search", "record"),
    ],
)
def test_a_verdict_about_the_place_where_the_stage_was_left(tmp_path, kinds):
    assert load_procedure(write(tmp_path, steps(*kinds)), shipped=False).steps


@pytest.mark.parametrize(
    ("kinds", "path", "says"),
    [
        ((*TWICE, "compare"), "step 4.kind", "needs a move step before it"),
        (("search", "scan", "move", "scan", "compare"), "step 5.kind", "no scan or search between"),
        ((*TWICE, "move", "search", "compare"), "step 6.kind", "no scan or search between"),
        ((*TWICE, "compare", "move"), "step 5.kind", "needs a compare step after it"),
        ((*TWICE, "move", "compare", "move"), "step 6.kind", "step 5 judged"),
        ((*TWICE, "move", "compare", "scan"), "step 6.kind", "needs a compare step after it"),
        ((*TWICE, "move", "compare", "search"), "step 6.kind", "needs a compare step after it"),
    ],
)
def test_a_verdict_about_another_place_is_refused(tmp_path, kinds, path, says):
    assert says in problems(tmp_path, steps(*kinds))[path].allowed


@pytest.mark.parametrize("named", ['["one", "one"]', '["one"]', '["one", "two", "one"]'])
def test_a_scan_is_not_compared_with_itself(tmp_path, named):
    text = steps(*TWICE, "move", "compare").replace('["one", "two"]', named)
    assert "two different scans" in problems(tmp_path, text)["step 5.scans"].allowed


@pytest.mark.parametrize(
    ("old", "new", "path"),
    [
        ('name = "mine"', 'name = ""', "name"),
        ('title = "Mine"', 'title = ""', "title"),
        ('title = "Mine"', 'title = "x"\nsummary = " "', "summary"),
        ('title = "confirm"', 'title = " \\t"', "step 2.title"),
        ('text = ["t"]', "text = []", "step 2.text"),
        ('text = ["t"]', 'text = ["t", ""]', "step 2.text[1]"),
        ('name = "one"', 'name = ""', "step 3.name"),
        ('scans = ["one", "two"]', "scans = []", "step 6.scans"),
    ],
)
def test_a_text_that_says_nothing_is_refused(tmp_path, old, new, path):
    text = steps("search", "confirm", "scan", "scan", "move", "compare")
    assert old in text
    assert problems(tmp_path, text.replace(old, new))[path].allowed == "must not be empty"


def test_there_is_an_end_to_the_steps(tmp_path):
    most = ("search", *["record"] * 63)
    assert len(load_procedure(write(tmp_path, steps(*most)), shipped=False).steps) == 64
    assert problems(tmp_path, steps(*most, "record"))["step"].value == "65 steps"


def test_going_back_needs_somewhere_to_go(tmp_path):
    text = GOOD.replace('kind = "search"', 'kind = "record"')
    text = text.replace('name = "one"', 'name = "one"\nif_missed = "search"')
    assert "step 2.if_missed" in problems(tmp_path, text)


@pytest.mark.parametrize(
    "content",
    [b"", b"\x00\xff\xfe", b"name = ", b"[[step]]\nkind = 1", "name = 'ü".encode("latin-1")],
)
def test_hostile_files_are_input_errors(tmp_path, content):
    path = tmp_path / "mine.toml"
    path.write_bytes(content)
    with pytest.raises(InputError):
        load_procedure(path, shipped=False)


def test_a_missing_file_and_a_folder_are_input_errors(tmp_path):
    for path in (tmp_path / "none.toml", tmp_path):
        with pytest.raises(InputError, match="cannot be read"):
            load_procedure(path, shipped=False)
