"""Run folders: made whole, replaced only on request, never at the cost of anything else."""

import errno
import json
import os
import subprocess
import sys

import numpy as np
import pytest

from fitter.errors import InputError
from fitter.inference.posterior import Posterior
from fitter.report.chain_file import read_chain, write_chain
from fitter.report.run_folder import MARKER, RunFolder, is_run_folder, read_run, write_atomic, writing
from fitter.report.summary import SCHEMA


@pytest.fixture
def posterior():
    rng = np.random.default_rng(2)
    chain = rng.normal(size=(2, 5, 4, 2))
    extra = {"absolute_magnitude": rng.normal(size=(2, 5, 4)), "q0": np.full((2, 5, 4), np.nan)}
    kinds = {"omega_m": "sampled", "H0": "sampled", "absolute_magnitude": "marginalised", "q0": "derived"}
    return Posterior(("omega_m", "H0"), chain, rng.normal(size=(2, 5, 4)), extra, kinds, {"converged": True, "seed": np.int64(3)})


def make_run(target, posterior, *, title="first", replace=False, more=()):
    folder = RunFolder(target, replace=replace)
    folder.open()
    write_atomic(folder.path / "config.yaml", "model: flat_lcdm\n")
    write_chain(folder.path / "chain.h5", posterior)
    for name in more:
        (folder.path / name).parent.mkdir(exist_ok=True)
        (folder.path / name).write_text("x")
    write_atomic(folder.path / "summary.json", json.dumps({"schema": SCHEMA, "title": title}))
    return folder.finish()


def siblings(path):
    return sorted(p.name for p in path.parent.iterdir())


def refusal(action):
    with pytest.raises(InputError) as caught:
        action()
    return str(caught.value)


def test_a_run_appears_whole_and_can_be_read_back(tmp_path, posterior):
    target = make_run(tmp_path / "runs" / "a b é", posterior)
    assert siblings(target) == ["a b é"]
    assert is_run_folder(target)
    run = read_run(target)
    assert run.summary["title"] == "first"
    assert run.config_file.read_text() == "model: flat_lcdm\n"
    assert read_run(target / "summary.json").folder == target
    again = run.posterior
    assert again.names == posterior.names
    assert list(again.kinds.items()) == list(posterior.kinds.items())
    assert again.sampling == {"converged": True, "seed": 3}
    for name in posterior.kinds:
        np.testing.assert_array_equal(again.draws(name), posterior.draws(name))
    np.testing.assert_array_equal(again.log_posterior, posterior.log_posterior)


def test_nothing_is_visible_before_the_end(tmp_path):
    folder = RunFolder(tmp_path / "run")
    folder.open()
    assert not (tmp_path / "run").exists()
    folder.leave()
    assert list(tmp_path.iterdir()) == []


def test_an_earlier_run_stays_unless_it_may_be_replaced(tmp_path, posterior):
    target = make_run(tmp_path / "run", posterior, more=["figures/corner.pdf", "figures/old.pdf"])
    text = refusal(lambda: RunFolder(target).open())
    assert "a run is already there. Replace it with --replace. Choose another place with --run-folder" in text
    make_run(target, posterior, title="second", replace=True)
    assert read_run(target).summary["title"] == "second"
    assert not (target / "figures").exists()
    assert siblings(target) == ["run"]


def test_the_earlier_run_is_there_until_the_new_one_is_complete(tmp_path, posterior):
    target = make_run(tmp_path / "run", posterior)
    folder = RunFolder(target, replace=True)
    folder.open()
    (folder.path / "config.yaml").write_text("new")
    folder.leave()
    assert read_run(target).summary["title"] == "first"
    assert siblings(target) == ["run"]


@pytest.mark.parametrize("replace", [False, True])
def test_what_is_no_run_folder_is_never_touched(tmp_path, replace):
    folder, file = tmp_path / "thesis", tmp_path / "file"
    folder.mkdir()
    (folder / "chapter.tex").write_text("precious")
    (folder / "summary.json").write_text('{"schema": "something else"}')
    file.write_text("precious")
    assert "is not a run folder of mufitter, it is left alone" in refusal(lambda: RunFolder(folder, replace=replace).open())
    assert "a file stands where the run folder should go" in refusal(lambda: RunFolder(file, replace=replace).open())
    assert "a part of this path is a file" in refusal(lambda: RunFolder(file / "run", replace=replace).open())
    assert siblings(folder) == ["file", "thesis"]
    assert (folder / "chapter.tex").read_text() == file.read_text() == "precious"


def test_files_of_others_inside_a_run_are_not_lost(tmp_path, posterior):
    target = make_run(tmp_path / "run", posterior)
    (target / "notes.md").write_text("precious")
    (target / "sub").mkdir()
    (target / "sub" / "link").symlink_to(tmp_path)
    text = refusal(lambda: RunFolder(target, replace=True).open())
    assert "holds what mufitter did not write: notes.md, sub/link" in text
    assert (target / "notes.md").read_text() == "precious"


def test_files_of_later_commands_do_not_block_a_replacement(tmp_path, posterior):
    target = make_run(tmp_path / "run", posterior)
    for name in ("figures/corner.svg", "tables/a.tex", "report.html"):
        (target / name).parent.mkdir(exist_ok=True)
        (target / name).write_text("x")
    make_run(target, posterior, title="second", replace=True)
    assert read_run(target).summary["title"] == "second"


def test_an_empty_folder_is_a_place_for_a_run(tmp_path, posterior):
    (tmp_path / "run").mkdir()
    assert read_run(make_run(tmp_path / "run", posterior)).summary["title"] == "first"


def test_a_link_to_a_run_stays_a_link(tmp_path, posterior):
    (tmp_path / "disk").mkdir()
    (tmp_path / "link").symlink_to(tmp_path / "disk")
    make_run(tmp_path / "link", posterior)
    make_run(tmp_path / "link", posterior, title="second", replace=True)
    assert (tmp_path / "link").is_symlink()
    assert read_run(tmp_path / "disk").summary["title"] == "second"


def test_an_unfinished_run_is_kept_until_resumed_or_discarded(tmp_path):
    folder = RunFolder(tmp_path / "run")
    folder.open()
    (folder.path / "checkpoint").mkdir()
    (folder.path / "checkpoint" / "chunk").write_text("steps")
    folder.leave()
    again = RunFolder(tmp_path / "run")
    assert again.earlier == folder.path
    text = refusal(again.open)
    assert "an unfinished run is there. Continue it with --resume, or discard it with --replace" in text
    again.open(resume=True)
    assert (again.path / "checkpoint" / "chunk").read_text() == "steps"
    again.leave()
    discard = RunFolder(tmp_path / "run", replace=True)
    discard.open()
    assert not (discard.path / "checkpoint").exists()
    discard.leave()
    assert list(tmp_path.iterdir()) == []


def test_resuming_a_finished_run_works_on_a_copy(tmp_path, posterior):
    target = make_run(tmp_path / "run", posterior, more=["checkpoint/chunk"])
    folder = RunFolder(target)
    assert folder.earlier == target
    folder.open(resume=True)
    assert (folder.path / "checkpoint" / "chunk").exists()
    assert not (folder.path / "summary.json").exists()
    assert read_run(target).summary["title"] == "first"
    write_atomic(folder.path / "summary.json", json.dumps({"schema": SCHEMA, "title": "longer"}))
    folder.finish()
    assert read_run(target).summary["title"] == "longer"


def test_something_else_called_unfinished_is_left_alone(tmp_path, posterior):
    (tmp_path / "run.unfinished").mkdir()
    (tmp_path / "run.unfinished" / "novel.txt").write_text("precious")
    for options in ({"replace": True}, {}):
        assert "in the way and not mufitter's" in refusal(lambda o=options: RunFolder(tmp_path / "run", **o).open())
    assert (tmp_path / "run.unfinished" / "novel.txt").read_text() == "precious"
    finished = make_run(tmp_path / "b.unfinished", posterior)
    assert "in the way" in refusal(lambda: RunFolder(tmp_path / "b", replace=True).open(resume=True))
    assert read_run(finished).summary["title"] == "first"


def test_two_processes_cannot_share_a_run_folder(tmp_path):
    folder = RunFolder(tmp_path / "run")
    folder.open()
    code = f"from fitter.report.run_folder import RunFolder; RunFolder({str(tmp_path / 'run')!r}, replace=True).open()"
    other = subprocess.run([sys.executable, "-c", code], capture_output=True, text=True, check=False)
    assert "another mufitter is at work in this run folder" in other.stderr
    assert (folder.path / MARKER).exists()
    folder.leave()


def test_a_replacement_cut_off_between_its_moves_is_undone(tmp_path, posterior):
    target = make_run(tmp_path / "run", posterior)
    hidden = tmp_path / ".run.replaced-by-mufitter"
    os.rename(target, hidden)
    assert "a run is already there" in refusal(lambda: RunFolder(target).open())
    assert read_run(target).summary["title"] == "first"
    assert not hidden.exists()


def test_failures_to_write_are_explained(tmp_path):
    def fail(number):
        with writing(tmp_path):
            raise OSError(number, os.strerror(number), str(tmp_path / "chain.h5"))

    assert "chain.h5: the disk is full. Make room, then continue with --resume" in refusal(lambda: fail(errno.ENOSPC))
    assert "read-only" in refusal(lambda: fail(errno.EROFS))
    assert "no permission" in refusal(lambda: fail(errno.EACCES))
    with pytest.raises(OSError, match="Invalid argument"):
        fail(errno.EINVAL)


def test_an_atomic_write_that_fails_leaves_the_old_file(tmp_path, monkeypatch):
    path = tmp_path / "summary.json"
    write_atomic(path, "old")

    def full(*_):
        raise OSError(errno.ENOSPC, "no room")

    monkeypatch.setattr(os, "fsync", full)
    with pytest.raises(OSError, match="no room"):
        write_atomic(path, "new")
    assert path.read_text() == "old"
    assert siblings(path) == ["summary.json"]


@pytest.mark.parametrize(
    ("content", "words"),
    [
        (b'{"schema": "mufit', "cut short"),
        (b"\xff\xfe\xff", "not text"),
        (b'{"schema": "mufitter summary 99"}', "Another version of mufitter wrote it"),
        (b"[]", "the format is not"),
    ],
)
def test_damaged_summaries(tmp_path, posterior, content, words):
    target = make_run(tmp_path / "run", posterior)
    (target / "summary.json").write_bytes(content)
    assert words in refusal(lambda: read_run(target))


def test_what_is_no_run_cannot_be_read(tmp_path):
    assert "there is no such run folder" in refusal(lambda: read_run(tmp_path / "nothing"))
    assert "summary.json is missing" in refusal(lambda: read_run(tmp_path))
    (tmp_path / "run.unfinished").mkdir()
    assert "continue it with `mufitter fit CONFIG --resume`" in refusal(lambda: read_run(tmp_path / "run"))


def test_damaged_chains(tmp_path, posterior):
    import h5py

    path = tmp_path / "chain.h5"
    assert "the chain is missing" in refusal(lambda: read_chain(path))
    write_chain(path, posterior)
    whole = path.read_bytes()
    for length in (10, 600, len(whole) // 2):
        path.write_bytes(whole[:length])
        assert "damaged or cut short" in refusal(lambda: read_chain(path))
    path.write_bytes(whole)
    with h5py.File(path, "r+") as file:
        del file["extra/q0"]
    assert "do not belong together" in refusal(lambda: read_chain(path))
    with h5py.File(path, "r+") as file:
        file.attrs["format"] = "mufitter chain 7"
    assert "Another version of mufitter wrote it" in refusal(lambda: read_chain(path))


def test_a_chain_file_carries_its_attributes(tmp_path, posterior):
    import h5py

    write_chain(tmp_path / "chain.h5", posterior, {"config_sha256": "abc"})
    with h5py.File(tmp_path / "chain.h5") as file:
        assert file.attrs["config_sha256"] == "abc"
        assert file["chain"].attrs["axes"] == "replica, step, walker, parameter"
    assert siblings(tmp_path / "chain.h5") == ["chain.h5"]
