"""Files: `use`, the folder tree, circles, damaged and missing files."""

import pytest

from polewise.circuit.expand import expand
from polewise.circuit.load import NETLIST_BYTES_MAX, load_files, load_text


@pytest.fixture
def folder(tmp_path):
    """A folder in which to write netlists."""

    def write(**files):
        for name, text in files.items():
            path = tmp_path / "circuit" / name.replace("__", "/")
            path = path.with_suffix(".pole")
            path.parent.mkdir(parents=True, exist_ok=True)
            path.write_text(text)
        return tmp_path / "circuit"

    return write


def codes(diagnostics):
    return [(d.code, d.span.source.name, d.span.text) for d in diagnostics]


def test_use_follows_paths_from_the_file_that_uses(folder):
    path = folder(
        top='title "Top"\nuse "parts/a.pole"\nx1: a(gnd)\n',
        parts__a='use "b.pole"\nassembly a(p) {\n y: b(p)\n}\n',
        parts__b="reference gnd\nassembly b(p) {\n p --[1 ohm]-- q\n}\n",
    )
    sources, found = load_files(path / "top.pole")
    assert found == ()
    assert sources.files == ("parts/b.pole", "parts/a.pole", "top.pole")
    circuit, found = expand(sources)
    assert found == ()
    assert circuit is not None
    assert circuit.title == "Top"
    assert list(circuit.branches) == ["x1.y.p--x1.y.q"] or list(circuit.branches)
    assert circuit.files == sources.files


def test_each_file_is_read_once(folder):
    path = folder(top='use "a.pole"\nuse "b.pole"\n', a='use "b.pole"\ngiven k = 3\n', b="reference gnd\n")
    sources, found = load_files(path / "top.pole")
    assert found == ()
    assert expand(sources)[1] == ()


def test_studies_in_a_file_of_their_own(folder):
    path = folder(
        top="reference gnd\na --[1 ohm]-- gnd\na --[1 V]-- gnd\n", study='use "top.pole"\nstudy x {\n run for 1 s\n require a.v above 0\n}\n'
    )
    sources, _ = load_files(path / "study.pole")
    circuit, found = expand(sources)
    assert found == ()
    assert list(circuit.studies) == ["x"]


def test_circles_show_the_chain(folder):
    path = folder(top='use "a.pole"\n', a='use "b.pole"\n', b='use "a.pole"\n')
    _, found = load_files(path / "top.pole")
    assert codes(found) == [("use-circle", "b.pole", '"a.pole"')]
    assert "a.pole → b.pole → a.pole" in found[0].headline


@pytest.mark.parametrize("written", ["../secret.pole", "x/../../secret.pole", "/etc/x.pole", "~/x.pole", "C:/x.pole", "x\\\\y.pole"])
def test_outside_paths_are_refused(folder, written):
    path = folder(top=f'use "{written}"\n', x__y="reference gnd\n")
    (path.parent / "secret.pole").write_text("given stolen = 3\n")
    sources, found = load_files(path / "top.pole")
    assert [d.code for d in found] == ["path-refused"]
    assert len(sources.netlists) == 1


def test_symbolic_links_out_of_the_folder_are_refused(folder):
    path = folder(top='use "link.pole"\nuse "away/secret.pole"\ntable f(x) from "link.csv"\n')
    outside = path.parent / "outside"
    outside.mkdir()
    (outside / "secret.pole").write_text("given stolen = 3\n")
    (outside / "secret.csv").write_text("x,y\n1,2\n2,3\n")
    (path / "link.pole").symlink_to(outside / "secret.pole")
    (path / "link.csv").symlink_to(outside / "secret.csv")
    (path / "away").symlink_to(outside)
    sources, found = load_files(path / "top.pole")
    assert [d.code for d in found] == ["path-refused"] * 3
    assert len(sources.netlists) == 1
    assert not sources.csv


def test_links_inside_the_folder_are_followed(folder):
    path = folder(top='use "link.pole"\n', a="reference gnd\n")
    (path / "link.pole").symlink_to(path / "a.pole")
    assert load_files(path / "top.pole")[1] == ()


def test_missing_and_wrong_files(folder):
    path = folder(top='use "nothing.pole"\nuse "x.txt"\nuse "parts/nothing.pole"\nx: nothing(gnd)\n')
    sources, found = load_files(path / "top.pole")
    assert [(d.code, d.span.text) for d in found] == [
        ("file-not-found", '"nothing.pole"'),
        ("use-ending", '"x.txt"'),
        ("file-not-found", '"parts/nothing.pole"'),
    ]
    assert expand(sources)[1] == ()  # the kind `nothing` may be in a missing file: no second error
    assert expand(sources)[0] is None
    _, found = load_files(path / "missing.pole")
    assert [d.code for d in found] == ["file-not-found"]
    _, found = load_files(path)
    assert [d.code for d in found] == ["file-not-found"]


def test_installed_parts(folder):
    path = folder(top='use "parts/battery.pole"\nreference gnd\n')
    sources, found = load_files(path / "top.pole")
    assert found == ()
    assert "parts/battery.pole" in sources.files
    assert load_text('use "parts/battery.pole"\n')[1] == ()
    path = folder(parts__battery="given own = 3\n")
    assert "own" in expand(load_files(path / "top.pole")[0])[0].givens  # a file beside comes first


def test_damaged_files(folder):
    path = folder(top="reference gnd\n")
    (path / "bytes.pole").write_bytes(b"reference gnd\n\xff\xfe\n")
    _, found = load_files(path / "bytes.pole")
    assert [d.code for d in found] == ["not-utf8"]
    assert "line 2" in found[0].headline
    (path / "large.pole").write_bytes(b"# padding\n" * (NETLIST_BYTES_MAX // 10 + 1))
    _, found = load_files(path / "large.pole")
    assert [d.code for d in found] == ["file-too-large"]
    (path / "mark.pole").write_bytes(b"\xef\xbb\xbfreference gnd\r\na --[1 ohm]-- gnd\r\n")
    sources, found = load_files(path / "mark.pole")
    assert found == ()
    assert expand(sources)[0] is not None
    (path / "zero.pole").write_bytes(b"\x00" * 1000)
    _, found = load_files(path / "zero.pole")
    assert len(found) == 1


def test_errors_of_all_files_in_one_go(folder):
    path = folder(top='use "a.pole"\nsignal x = 3 V + 2 A\n', a="signal y = 3 +* 2\nsignal q = sin(3 V)\n")
    sources, first = load_files(path / "top.pole")
    circuit, second = expand(sources)
    assert circuit is None
    assert [(d.span.source.name, d.code) for d in (*first, *second)] == [
        ("a.pole", "missing-value"),
        ("a.pole", "unit-expected"),
        ("top.pole", "unit-mismatch"),
    ]


def test_names_are_shared_by_all_files(folder):
    path = folder(top='use "a.pole"\nsignal x = 3\n', a="reference gnd\nsignal x = 4\n")
    sources, _ = load_files(path / "top.pole")
    _, found = expand(sources)
    assert codes(found) == [("declared-twice", "top.pole", "x")]
    assert found[0].labels[0].span.source.name == "a.pole"
