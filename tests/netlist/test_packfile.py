"""A pack read back gives what was recorded, and whatever is wrong with it is said in one line."""

from __future__ import annotations

import json
from dataclasses import replace

import pytest

from netlist.jobfile import parse_job
from netlist.packfile import read_pack
from netlist.records import design_record, record_text
from synth.errors import JobError
from synth.evidence import response_error
from synth.job import JobText
from synth.recorded import rebuilt
from synth.shortages import Change, Repick, Shortage
from tests.netlist import boards

JOB = """
title = "Low-pass"
[target]
numerator = [39478417.6]
denominator = [1, 6981.317, 39478417.6]
[signal]
band = ["10 Hz", "10 kHz"]
"""
GONE = Shortage(kind="resistor", value=15800.0, ref="R1")
NEXT = Shortage(kind="capacitor", value=1e-8, source="E12")


def made(**changes):
    """A design that was read from a text."""
    asked = replace(parse_job(JOB, name="some/where/low-pass.toml"), title="Low-pass")
    return replace(boards.design(), job=asked, **changes)


@pytest.fixture
def written(tmp_path):
    """Writes a record as a pack and returns its folder."""

    def write(record: object) -> str:
        folder = tmp_path / "pack"
        folder.mkdir(exist_ok=True)
        text = record if isinstance(record, str) else json.dumps(record)
        (folder / "design.json").write_text(text, encoding="utf-8")
        return str(folder)

    return write


def record_of(design) -> dict:
    return json.loads(record_text(design_record(design, boards.verification(design))))


def test_what_was_written_is_read_back(written) -> None:
    """The job, its text, form, values, nets, boards and seed."""
    design = made()
    found = read_pack(written(record_of(design)))
    assert found.job == design.job
    assert found.job.source == JobText(name="low-pass.toml", text=JOB)
    assert (found.form, found.boards, found.seed) == ("controllable", 60, 1)
    assert found.shortages == ()
    assert [(p.ref, p.kind, p.nets, p.value) for p in found.parts] == [
        (p.ref, p.kind, p.nets, p.value) for p in design.circuit.bought
    ]


def test_the_text_in_the_record_names_no_folder(written) -> None:
    """The same job from another folder gives the same bytes."""
    record = record_of(made())
    assert record["job"] == {"name": "low-pass.toml", "text": JOB, "files": {}}


def test_what_was_out_of_stock_is_read_back_with_what_was_so_before(written) -> None:
    """A second repick knows of the first."""
    error = response_error(*(2 * (boards.design().wanted.response([10.0, 100.0]),)))
    repick = Repick(
        asked=(NEXT,),
        earlier=(GONE,),
        bought=("R2",),
        all_free=False,
        missing=("C1", "C2"),
        changes=(Change(ref="C1", kind="capacitor", before=1e-8, after=1.2e-8),),
        before=error,
        after=error,
        share_before=0.98,
        share_after=0.91,
    )
    record = record_of(made(repick=repick))
    assert record["repick"]["changed"][0]["after"] == 1.2e-8
    assert read_pack(written(record)).shortages == (GONE, NEXT)


DRAWER = "kind,value,tolerance,count\r\nresistor,10k,1 %,3\r\nresistor,15.8k,1 %,\r\n"


def drawn(folder) -> dict:
    """The record of a design from a drawer beside its job; the drawer is gone afterwards."""
    file = folder / "drawer.csv"
    file.write_text(DRAWER, encoding="utf-8", newline="")
    text = JOB + '[board]\nstock = "drawer.csv"\n'
    job = parse_job(text, name="low-pass.toml", folder=folder)
    file.unlink()
    return record_of(replace(boards.design(), job=job))


def test_the_drawer_comes_with_the_pack(written, tmp_path) -> None:
    """Its text is in the record, and the job is the same with the file gone."""
    record = drawn(tmp_path)
    assert record["job"]["files"] == {"drawer.csv": DRAWER}
    found = read_pack(written(record)).job
    assert found.source is not None
    assert found.source.files == (("drawer.csv", DRAWER),)
    assert [(i.value, i.count) for i in found.board.resistors.stock] == [(1e4, 3), (15.8e3, None)]


@pytest.mark.parametrize(
    ("files", "message"),
    [
        ({}, "got 'drawer.csv', expected one of the files that come with the job: none"),
        ({"a.csv": ""}, "expected one of the files that come with the job: 'a.csv'"),
        (
            {"drawer.csv": "kind,value,tolerance\ncoil,1,1 %\n"},
            "drawer.csv:2: column 1 (kind): got",
        ),
    ],
)
def test_a_pack_without_its_drawer_is_refused(written, tmp_path, files, message) -> None:
    """Nothing is looked for in any folder."""
    record = drawn(tmp_path)
    record["job"]["files"] = files
    (tmp_path / "pack").mkdir()
    for folder in (tmp_path, tmp_path / "pack"):
        (folder / "drawer.csv").write_text(DRAWER, encoding="utf-8")
    with pytest.raises(JobError) as caught:
        read_pack(written(record))
    assert message in str(caught.value)
    assert "low-pass.toml:9: board.stock: " in str(caught.value)
    assert "\n" not in str(caught.value)


def test_a_folder_that_is_no_pack_is_refused(tmp_path) -> None:
    """Nothing there, a file, a folder without a record."""
    for path, message in (
        (tmp_path / "none", "does not exist, expected the folder of a pack"),
        (tmp_path, "holds no design.json, expected the folder of a pack"),
        (tmp_path / "file", "is a file, expected the folder of a pack"),
    ):
        (tmp_path / "file").write_text("x")
        with pytest.raises(JobError, match=message):
            read_pack(path)


@pytest.mark.parametrize(
    ("text", "message"),
    [
        ("", r"design\.json:1: got no JSON at column 1; the file is damaged"),
        ('{"format": 1,', r"got no JSON at column \d+; the file is damaged"),
        ('{"format": NaN}', "got no JSON; the file is damaged"),
        ("[" * 200_000, "got no JSON; the file is damaged"),
        ("[1, 2]", "got a list of 2, expected the record of a design"),
        ("{}", "format: is missing; the file is damaged"),
        ('{"format": 2}', "format: got 2, expected 1"),
        ('{"format": 1}', "job: is missing: an earlier version wrote this pack"),
    ],
)
def test_a_file_that_is_no_record_is_refused(written, text, message) -> None:
    """One line with the file and the place."""
    with pytest.raises(JobError, match=message) as caught:
        read_pack(written(text))
    assert "\n" not in str(caught.value)


@pytest.mark.parametrize(
    ("path", "value", "message"),
    [
        (("format",), True, "format: got true, expected 1"),
        (("job",), 3, "job: got 3, expected a table"),
        (("job", "text"), None, "job.text: got nothing, expected a text"),
        (("job", "text"), "[target]\nx = 1", "job.text: low-pass.toml:2: target.x: "),
        (("job", "name"), "a\nb", r"job.name: got 'a\nb', expected one line of text"),
        (("job", "files"), [], "job.files: got a list of 0, expected a table"),
        (("job", "files"), {"drawer.csv": 1}, "job.files.drawer.csv: got 1, expected a text"),
        (("job", "files"), {"a\nb": 1}, r"job.files.'a\nb': got 1, expected a text"),
        (("form",), "ladderish", "form: got 'ladderish', expected one of controllable, "),
        (("form",), "auto", "form: got 'auto', expected one of controllable, "),
        (("form",), None, "form: got nothing, expected a text"),
        (("components",), {}, "components: got a table, expected a list of tables"),
        (("components", 0), 1, "components[0]: got 1, expected a table"),
        (("components", 0, "ref"), "R2", "components[1].ref: got 'R2', expected a reference of"),
        (("components", 0, "kind"), "coil", "components[0].kind: got 'coil', expected one of"),
        (("components", 0, "value"), "4k7", "components[0].value: got '4k7', expected a positive"),
        (("components", 2, "value"), -1.0, "components[2].value: got -1.0, expected a positive"),
        (("components", 1, "value"), True, "components[1].value: got true, expected a positive"),
        (("components", 0, "nets"), ["in"], "components[0].nets: got a list of 1, expected two"),
        (("components", 0, "nets", 1), 7, "components[0].nets[1]: got 7, expected the name of a"),
        (("yield", "boards"), 0, "yield.boards: got 0, expected a whole number from 1 to 10000000"),
        (("yield", "boards"), 10_000_001, "yield.boards: got 10000001, expected a whole number"),
        (("yield", "seed"), 1.5, "yield.seed: got 1.5, expected a whole number from 0"),
    ],
)
def test_a_damaged_record_is_refused_with_the_key(written, path, value, message) -> None:
    """The path of the key, what came, what was expected."""
    record = record_of(made())
    place = record
    for step in path[:-1]:
        place = place[step]
    place[path[-1]] = value
    folder = written(record)
    with pytest.raises(JobError) as caught:
        read_pack(folder)
    assert str(caught.value).startswith(f"{folder}/design.json: {message}")


def leaves(content, path=()):
    """The paths of all values within `content`, of tables and lists too."""
    if isinstance(content, dict | list):
        keys = content if isinstance(content, dict) else range(len(content))
        for key in keys:
            yield (*path, key)
            yield from leaves(content[key], (*path, key))


def shown(path) -> str:
    first, *rest = (f"[{key}]" if isinstance(key, int) else f".{key}" for key in path)
    return "".join([first.lstrip("."), *rest])


WRONG = ("null", "-1", '"x"', "[]", "{}", "true", "1e400", '"1e400"', '"a\\nb"')


def test_any_damage_is_one_message_with_file_and_key_or_makes_no_difference(written) -> None:
    """Every value that is read, and every table and list, is replaced by one after the other of
    `WRONG`: refused in one line that starts with the file and the key, or one of those that the
    value belongs to; or what is read is the same, but for the name of the job and the seed.  An
    empty list of earlier shortages is a sound one."""
    error = response_error(*(2 * (boards.design().wanted.response([10.0, 100.0]),)))
    repick = Repick(
        asked=(NEXT,),
        earlier=(GONE,),
        bought=(),
        all_free=False,
        missing=("C1",),
        changes=(),
        before=error,
        after=error,
        share_before=0.98,
        share_after=0.91,
    )
    design = made(repick=repick)
    record = record_of(design)
    folder = written(record)
    sound = read_pack(folder)
    read = ("format", "job", "form", "components", "yield", "repick", "title", "checks")
    refused = 0
    for path in (p for p in leaves(record) if p[0] in read):
        place = record
        for step in path[:-1]:
            place = place[step]
        kept, place[path[-1]] = place[path[-1]], "@"
        text = json.dumps(record)
        place[path[-1]] = kept
        for wrong in WRONG:
            written(text.replace('"@"', wrong))
            try:
                found = read_pack(folder)
                rebuilt(design.circuit, found.parts, name=found.name)
            except JobError as error_:
                message = str(error_)
                keys = [shown(path[:n]) for n in range(1, len(path) + 1)]
                # What is gone is missed by the whole, and what is there twice by the other.
                assert any(message.startswith(f"{folder}/design.json: {k}") for k in keys), message
                assert "\n" not in message and message.count(keys[-1] + ":") <= 1
                refused += 1
            else:
                source = replace(found.job.source, name=sound.job.source.name)
                same = replace(found, job=replace(found.job, source=source), seed=sound.seed)
                assert same == sound or path == ("repick", "already_without"), (path, wrong)
    assert refused > 500


@pytest.mark.parametrize(
    "path", [("yield",), ("form",), ("components",), ("job", "name"), ("components", 0, "ref")]
)
def test_a_missing_key_is_named(written, path) -> None:
    """Every key that is read."""
    record = record_of(made())
    place = record
    for step in path[:-1]:
        place = place[step]
    del place[path[-1]]
    with pytest.raises(JobError, match=f"{path[-1]}: is missing; the file is damaged"):
        read_pack(written(record))
