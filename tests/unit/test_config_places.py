# SPDX-License-Identifier: MIT
"""Places and patterns of a batch file: which files they lead to, and what is refused."""

import pytest

from scanstrain.cli import main
from scanstrain.config import check_batch, load_config, sites_of
from scanstrain.errors import OptionError
from scanstrain.jobs import plan_jobs
from scanstrain.proof.batch import scans_of

EPOCHS = (("january", "scans/{place}/2031-01_*.laz"), ("june", "scans/{place}/2031-06_*.laz"))


@pytest.fixture
def batch(tmp_path):
    """Write a batch file over empty scans; return its path."""

    def written(files, *, places=("chainage_*",), epochs=EPOCHS, more=""):
        for file in files:
            (tmp_path / file).parent.mkdir(parents=True, exist_ok=True)
            (tmp_path / file).write_text(file, encoding="utf-8")
        lines = [more, '[output]\nfolder = "results"']
        lines += [f'[[place]]\nname = "{name}"' for name in places]
        lines += [f'[[epoch]]\nlabel = "{label}"\nfile = "{file}"' for label, file in epochs]
        path = tmp_path / "job.toml"
        path.write_text("\n".join(lines), encoding="utf-8")
        return path

    return written


def scans(*places, months=("01", "06")):
    return [f"scans/{place}/2031-{month}_scan.laz" for place in places for month in months]


def test_places_are_found_in_the_order_of_their_numbers_each_with_its_own_folder(batch, tmp_path):
    path = batch([*scans("chainage_100", "chainage_20", "portal"), "scans/chainage_20/notes.txt"])
    jobs = plan_jobs(load_config(path))
    assert [job.name for job in jobs] == ["chainage_20/january_to_june", "chainage_100/january_to_june"]
    assert jobs[0].folder == tmp_path / "results" / "chainage_20" / "january_to_june"
    assert jobs[0].reference == tmp_path / "scans" / "chainage_20" / "2031-01_scan.laz"
    assert jobs[0].current.name == "2031-06_scan.laz"


def test_a_proof_finds_the_scans_of_every_place(batch):
    path = batch(scans("chainage_100", "chainage_20"))
    assert list(scans_of(load_config(path))) == [
        "chainage_20/january", "chainage_20/june", "chainage_100/january", "chainage_100/june",
    ]  # fmt: skip


@pytest.mark.parametrize(
    ("only", "names"),
    [
        ("portal", ["portal/january_to_june"]),
        ("june", ["chainage_20/january_to_june", "portal/january_to_june"]),
        ("chainage_20/january_to_june", ["chainage_20/january_to_june"]),
    ],
)
def test_several_places_and_the_choice_among_them(batch, only, names):
    path = batch(scans("chainage_20", "portal"), places=("chainage_*", "portal"))
    assert [job.name for job in plan_jobs(load_config(path), [only])] == names


@pytest.mark.parametrize(
    ("how", "pairs"),
    [
        ('comparisons = "first"', ["a_to_b", "a_to_c"]),
        ('comparisons = "previous"', ["a_to_b", "b_to_c"]),
        ('[[comparison]]\nreference = "b"\ncurrent = "c"', ["b_to_c"]),
    ],
)
def test_comparisons_are_those_of_the_file_at_every_place(batch, how, pairs):
    files = [f"{place}-{epoch}.laz" for place in ("north", "south") for epoch in "abc"]
    path = batch(files, places=("*",), epochs=[(epoch, f"{{place}}-{epoch}.laz") for epoch in "abc"], more=how)
    names = [job.name for job in plan_jobs(load_config(path))]
    assert names == [f"{place}/{pair}" for place in ("north", "south") for pair in pairs]


def test_the_name_of_a_place_may_stand_twice_and_must_then_agree(batch):
    files = ["a/a_1.laz", "a/b_1.laz", "a/a_2.laz", "b/b_1.laz", "b/b_2.laz"]
    path = batch(files, places=("*",), epochs=[(f"e{n}", f"{{place}}/{{place}}_{n}.laz") for n in (1, 2)])
    assert [(site.name, site.batch.epoch[0].file.name) for site in sites_of(load_config(path))] == [
        ("a", "a_1.laz"), ("b", "b_1.laz"),
    ]  # fmt: skip


def test_a_pattern_without_places_leads_to_one_file(batch, tmp_path):
    path = batch(["2031-01_x.laz", "2031-06_x.laz", ".2031-06_y.laz"], places=(),
                 epochs=[("january", "2031-01_*.laz"), ("june", "2031-?6_*.laz")])  # fmt: skip
    assert [entry.file.name for entry in load_config(path).epoch] == ["2031-01_x.laz", "2031-06_x.laz"]
    (job,) = plan_jobs(load_config(path))
    assert (job.name, job.folder) == ("january_to_june", tmp_path / "results" / "january_to_june")
    assert (job.reference.name, job.current.name) == ("2031-01_x.laz", "2031-06_x.laz")


def test_brackets_and_braces_in_names_are_letters(batch):
    path = batch(
        ["wall [1]/a.laz", "wall [1]/b.laz"], places=(), epochs=[("a", "wall [1]/a*.laz"), ("b", "wall [1]/b.laz")]
    )
    (job,) = plan_jobs(load_config(path))
    assert job.reference.name == "a.laz"


def test_start_files_may_belong_to_places(batch, tmp_path):
    start = '[registration]\nstart = "targets"\nstart_file = "targets/{place}.csv"'
    path = batch(scans("chainage_20"), more=start)
    (job,) = plan_jobs(load_config(path))
    assert job.config.registration.start_file == tmp_path / "targets" / "chainage_20.csv"


def test_an_epoch_that_one_place_lacks_fails_there_and_nowhere_else(batch, capsys):
    path = batch([*scans("chainage_20"), *scans("chainage_30", months=("01",))])
    jobs = plan_jobs(load_config(path))
    assert [job.current.exists() for job in jobs] == [True, False]
    assert jobs[1].current.name == "2031-06_*.laz"
    with pytest.raises(OptionError, match=r"epoch\[2\].file: required a scan file; got no such file, .*chainage_30"):
        check_batch(path)


@pytest.mark.parametrize(
    ("files", "changes", "words"),
    [
        (scans("portal"), {}, ["job.toml:", "place[1].name: required a place with scans; got no file"]),
        (scans("chainage_1", months=("01",)), {}, ["epoch[2].file: required a pattern that files match; got no file"]),
        ([*scans("chainage_1"), "scans/chainage_1/2031-01_b.laz"], {},
         ["epoch[1].file: required one file for each epoch; got 2 files at chainage_1: 2031-01_b.laz, "]),
        (["x1.laz"], {"places": (), "epochs": [("a", "x*.laz"), ("b", "y*.laz")]},
         ["epoch[2].file: required a pattern that a file matches"]),
        (["x1.laz"], {"places": (), "epochs": [("a", "x*.laz"), ("b", "x?.laz")]},
         ["epoch[2].file: required a different file for each epoch; got x1.laz again, which is epoch 'a'"]),
        (scans("chainage_1"), {"places": ("chainage_*", "chainage_*")}, ["place[2].name: required each place once"]),
        (scans("chainage_1"), {"places": ()}, ["epoch[1].file: required a [[place]] for {place}; got none"]),
        (scans("chainage_1"), {"epochs": [EPOCHS[0], ("b", "b.laz")]}, ["epoch[2].file: required a file with {place}"]),
        (scans("chainage_1"), {"epochs": [EPOCHS[0], ("b", "**/{place}.laz")]}, ["required * or ? within one name"]),
        (scans("a b"), {"places": ("a*",)}, ["names of letters, digits, dots", "'a b'"]),
        (scans("a"), {"places": ("../a",)}, ["place[1].name: required letters, digits"]),
    ],
)  # fmt: skip
def test_what_leads_nowhere_or_to_too_much_is_one_sentence_and_exit_2(batch, capsys, files, changes, words):
    path = batch(files, **changes)
    assert main(["run", str(path)]) == 2
    said = capsys.readouterr().err
    assert "Traceback" not in said
    for word in words:
        assert word in said


def test_hidden_files_are_no_scans(batch):
    """A copy that is being made often has a name with a dot before it."""
    epochs = [EPOCHS[0], ("b", "scans/{place}/*06_*.laz")]
    path = batch([*scans("chainage_1"), "scans/chainage_1/.2031-06_scan.laz"], epochs=epochs)
    assert [job.current.name for job in plan_jobs(load_config(path))] == ["2031-06_scan.laz"]
