"""Batches: every input ends as one record, whatever it holds and whatever happens to the process that works at it."""

from __future__ import annotations

import csv
import json
import os
import signal
import subprocess
import sys
import tomllib
from concurrent.futures import Future, ProcessPoolExecutor, ThreadPoolExecutor
from concurrent.futures.process import BrokenProcessPool
from multiprocessing import get_context
from pathlib import Path

import numpy as np
import pytest
from click.testing import CliRunner

import latticedip as ld
from latticedip.cli.batch import ProgressBar
from latticedip.cli.main import main
from latticedip.errors import FileError, InputError, LatticedipError, StudyError
from latticedip.study import batch_pool
from latticedip.study.batch import Progress
from latticedip.study.batch_inputs import collect, guess_cost
from latticedip.study.batch_journal import Journal
from latticedip.study.batch_template import Template, known_tasks
from latticedip.study.probe_rules import far_points
from tests.batch_runs import children, lines, records, start_batch, wait_for
from tests.structure_files import SOUND, TEMPLATE, bilayer_cif, monoclinic_cif, write_files

DATA = Path(__file__).parent / "data" / "batch"


@pytest.fixture(scope="module")
def finished(tmp_path_factory):
    """A folder with 21 inputs (one of them broken), a template, and the results of an undisturbed run in ``out``."""
    folder = tmp_path_factory.mktemp("batch")
    write_files(folder / "in", 21)
    (folder / "t.toml").write_text(TEMPLATE, encoding="utf-8")
    with pytest.MonkeyPatch.context() as patch:
        patch.chdir(folder)
        result = ld.run_batch("t.toml", ["in"], "out", workers=2)
    assert (result.done, result.failed, result.reused, result.skipped) == (20, 1, 0, 0)
    return folder


@pytest.fixture
def work(finished, tmp_path, monkeypatch):
    """A fresh copy of that folder, entered."""
    subprocess.run(["cp", "-r", f"{finished}/.", str(tmp_path)], check=True)
    monkeypatch.chdir(tmp_path)
    return tmp_path


def summary(folder="out"):
    return json.loads(Path(folder, "summary.json").read_text(encoding="utf-8"))


def run(*arguments, **keywords):
    """A batch in this process, which has imported and compiled everything already."""
    with ThreadPoolExecutor(1) as executor:
        return ld.run_batch(*arguments, executor=executor, **keywords)


def command(*arguments, **keywords):
    return CliRunner().invoke(main, ["batch", *map(str, arguments)], **keywords)


# What a run leaves


def test_every_input_has_one_record(finished):
    found = records(finished / "out")
    assert sorted(found) == sorted(f"in/{path.name}" for path in (finished / "in").iterdir())
    broken = found["in/00019_rocksalt.cif"]
    assert broken["status"] == "failed"
    assert broken["error"] == "in/00019_rocksalt.cif: the file is empty."
    assert broken["reason"] == "input"
    assert broken["results"] == {}
    sound = found["in/00000_bilayer.cif"]
    assert sound["status"] == "done" and sound["error"] is None
    assert list(sound["results"]) == ["rank", "field"]


def test_results_are_those_of_the_functions(finished):
    crystal = ld.read_crystal(finished / "in" / "00000_bilayer.cif")
    element = next(s for s in crystal.symbols if s in ("Mn", "Fe", "Co", "Ni"))
    size = {"Mn": 4.4, "Fe": 4.0, "Co": 3.1, "Ni": 2.0}[element]
    moments = [[0, 0, size] if symbol == element else [0, 0, 0] for symbol in crystal.symbols]
    ordering = ld.Ordering(crystal, moments)
    energy = ld.dipolar_energy(ordering)
    field = ld.local_field(ordering, [[0.27, 0.31, 0.44]])
    results = records(finished / "out")["in/00000_bilayer.cif"]["results"]
    row = next(row for row in results["rank"]["rows"] if row["ordering"] == "ferromagnet along c")
    assert row["energy_ueV_per_ion"] == pytest.approx(energy.per_ion_eV * 1e6, rel=1e-12)
    entry = next(entry for entry in results["field"]["orderings"] if entry["ordering"] == "ferromagnet along c")
    np.testing.assert_allclose(entry["rows"][0]["field_T"], field.total[0], rtol=1e-9, atol=1e-12)
    # With `field` among the tasks the fields are not told twice.
    assert row["fields"] == {}


def test_the_ordering_in_a_file_is_a_candidate(finished):
    rows = records(finished / "out")["in/00003_magnetic.mcif"]["results"]["rank"]["rows"]
    assert {row["ordering"] for row in rows} == {
        "ferromagnet along c", "ferromagnet along a", "doubled along c", "in the file",
    }  # fmt: skip


def test_the_table_holds_all_rows_in_order_of_input(finished):
    with open(finished / "out" / "results.csv", encoding="utf-8", newline="") as stream:
        rows = list(csv.DictReader(stream))
    assert [row["input"] for row in rows] == sorted(row["input"] for row in rows)
    failed = [row for row in rows if row["status"] == "failed"]
    assert len(failed) == 1 and failed[0]["error"] == "in/00019_rocksalt.cif: the file is empty."
    first = [row for row in rows if row["input"] == "in/00000_bilayer.cif"]
    assert [row["task"] for row in first] == ["rank"] * 3 + ["field"] * 3
    found = records(finished / "out")["in/00000_bilayer.cif"]["results"]["rank"]["rows"]
    assert [float(row["energy_ueV_per_ion"]) for row in first[:3]] == [row["energy_ueV_per_ion"] for row in found]


def test_the_summary_counts(finished):
    document = summary(finished / "out")
    assert document["counts"] == {"inputs": 21, "done": 20, "failed": 1, "reused": 0, "skipped": 0}
    assert document["failed"] == [
        {"input": "in/00019_rocksalt.cif", "error": "in/00019_rocksalt.cif: the file is empty.", "reason": "input"}
    ]
    times = document["times"]
    assert times["workers"] == 2 and 0 < times["median_seconds_per_input"] < times["seconds"]


# Going on


def test_a_finished_run_has_nothing_left(work):
    before = lines()
    assert command("t.toml", "in", "-o", "out", "--resume").exit_code == 1
    assert lines() == before
    assert summary()["counts"]["reused"] == 21


def test_a_half_written_line_is_mended(work):
    before, table = lines(), Path("out/results.csv").read_bytes()
    data = Path("out/results.jsonl").read_bytes()
    Path("out/results.jsonl").write_bytes(data[: len(data) * 2 // 3])
    result = ld.run_batch("t.toml", ["in"], "out", resume=True, workers=1)
    assert 0 < result.reused < 21
    assert lines() == before
    assert Path("out/results.csv").read_bytes() == table


@pytest.mark.parametrize(
    "junk", [b"\n", b"{}\n", b"[1]\n", b'{"input": 3}\n', b"\x00\xff\n", b'{"input":"in/x', b"\n\n"]
)
def test_lines_that_are_no_records_are_removed(work, junk):
    before = lines()
    with open("out/results.jsonl", "ab") as stream:
        stream.write(junk)
    assert run("t.toml", ["in"], "out", resume=True).reused == 21
    assert lines() == before


def test_a_changed_input_is_done_again(work):
    before = records()
    changed = "in/00001_rocksalt.cif"
    text = Path(changed).read_text(encoding="utf-8")
    Path(changed).write_text(text.replace("_cell_length_a 4", "_cell_length_a 5"), encoding="utf-8")
    assert run("t.toml", ["in"], "out", resume=True).reused == 20
    after = records()
    assert [name for name in before if before[name] != after[name]] == [changed]


def test_a_changed_template_does_all_again(work):
    Path("t.toml").write_text(TEMPLATE.replace("Mn = 4.4", "Mn = 4.5"), encoding="utf-8")
    assert run("t.toml", ["in"], "out", resume=True).reused == 0
    assert len(lines()) == 21


def test_a_changed_ordering_file_changes_the_template(work):
    Path("o.mcif").write_bytes(Path("in/00003_magnetic.mcif").read_bytes())
    Path("u.toml").write_text('[[ordering]]\nfile = "o.mcif"\n', encoding="utf-8")
    first = Template.load("u.toml").digest
    Path("o.mcif").write_bytes(Path("in/00009_magnetic.mcif").read_bytes())
    assert Template.load("u.toml").digest != first


def test_records_of_inputs_that_are_gone_are_removed(work):
    os.unlink("in/00002_monoclinic.cif")
    result = run("t.toml", ["in"], "out", resume=True)
    assert (result.done, result.reused) == (19, 20)
    assert "in/00002_monoclinic.cif" not in records()


def test_a_failure_by_a_limit_is_tried_again(work):
    shutil_line = next(line for line in lines() if b"00000_bilayer" in line)
    record = json.loads(shutil_line)
    record |= {"status": "failed", "error": "it took longer than 1 s", "reason": "timeout", "results": {}}
    kept = [line for line in lines() if b"00000_bilayer" not in line]
    Path("out/results.jsonl").write_bytes(b"".join(kept) + json.dumps(record).encode() + b"\n")
    assert run("t.toml", ["in"], "out", resume=True).reused == 20
    assert shutil_line in lines()


def test_results_are_not_written_over(work):
    with pytest.raises(InputError) as caught:
        run("t.toml", ["in"], "out")
    assert str(caught.value) == (
        "'out' holds the results of an earlier run. Go on with it with --resume (resume=True), or name another folder."
    )


def test_an_input_is_not_written_over(work):
    Path("results.jsonl").write_text("data_x\n", encoding="utf-8")
    with pytest.raises(InputError) as caught:
        run("t.toml", ["results.jsonl"], ".", resume=True)
    assert str(caught.value) == (
        f"{str(work / 'results.jsonl')!r} is an input, and results would be written over it. Name another folder."
    )
    assert Path("results.jsonl").read_text(encoding="utf-8") == "data_x\n"


def test_two_batches_do_not_share_a_folder(work):
    with Journal(Path("both"), resume=False), pytest.raises(InputError) as caught:
        run("t.toml", ["in"], "both", resume=True)
    assert str(caught.value) == "another batch is writing to 'both'. Wait for it, or name another folder."


def test_a_folder_that_is_a_file(work):
    with pytest.raises(FileError) as caught:
        run("t.toml", ["in"], "t.toml")
    assert str(caught.value) == "'t.toml': File exists."


# Inputs


def test_inputs_are_files_patterns_folders_and_a_list(work, monkeypatch):
    Path("in/notes.txt").write_text("none\n", encoding="utf-8")
    Path("in/.hidden.cif").write_text("none\n", encoding="utf-8")
    Path("in/deeper").mkdir()
    Path("in/deeper/POSCAR").write_bytes(Path("in/00005_poscar.vasp").read_bytes())
    found = collect(["in/0000[01]*", "in/00001_rocksalt.cif", "in", "none*", "gone.cif"], Path("out"))
    names = [job.input for job in found.jobs]
    assert len(names) == 24 and names == sorted(names)
    assert {"none*", "gone.cif", "in/deeper/POSCAR"} < set(names)
    assert {(entry["input"], entry["reason"]) for entry in found.skipped} > {
        ("in/notes.txt", "not the name of a structure file"),
        ("in/.hidden.cif", "hidden"),
        ("in/00001_rocksalt.cif", "the same file as in/00001_rocksalt.cif"),
    }
    assert [entry["input"] for entry in collect(["."], Path("out")).skipped if "results" in entry["reason"]] == [
        "./out"
    ]


def test_a_list_on_stdin_and_files_that_are_not_there(work):
    result = command("t.toml", "-", "-o", "o", "--quiet", input="in/00001_rocksalt.cif\n\ngone.cif\nnone*\n")
    assert (result.exit_code, result.output) == (1, "")
    assert {name: record["error"] for name, record in records("o").items()} == {
        "in/00001_rocksalt.cif": None,
        "gone.cif": "gone.cif: there is no such file.",
        "none*": "none*: there is no such file.",
    }


@pytest.mark.parametrize(("named", "shown"), [([], None), ([""], "''"), (["a\0b"], "'a\\x00b'")])
def test_no_input_is_refused(work, named, shown):
    with pytest.raises(InputError) as caught:
        run("t.toml", named, "o")
    expected = f"an input is the path of a file, a folder or a pattern, got {shown}."
    assert str(caught.value) == (
        expected if shown else "there are no inputs: name structure files, patterns or folders."
    )


def test_large_structures_come_first(tmp_path):
    import random

    rng = random.Random(1)
    texts = {"small": SOUND["grid"][0](rng), "large": monoclinic_cif(rng, 40), "symmetric": bilayer_cif(rng)}
    for name, text in texts.items():
        (tmp_path / name).write_text(text, encoding="utf-8")
    costs = {name: guess_cost(str(tmp_path / name)) for name in texts}
    assert costs["small"] < costs["symmetric"] < costs["large"]
    assert guess_cost(str(tmp_path / "gone")) == 0


def test_hostile_names_do_no_harm(work):
    """A label that a spreadsheet would run, a name with a comma and a newline, one that is no valid Unicode."""
    Path("u.toml").write_text(TEMPLATE.replace('"ferromagnet along c"', '"=1+1"'), encoding="utf-8")
    data = Path("in/00001_rocksalt.cif").read_bytes()
    names = ["=cmd,\n$(touch harm).cif", os.fsdecode(b"caf\xe9.cif")]
    for name in names:
        Path(name).write_bytes(data)
    assert run("u.toml", names, "o").done == 2
    assert set(records("o")) == set(names)
    with open("o/results.csv", encoding="utf-8", newline="") as stream:
        rows = list(csv.DictReader(stream))
    assert {row["input"] for row in rows} == {"'=cmd,\n$(touch harm).cif", "caf\\udce9.cif"}
    assert "'=1+1" in {row["ordering"] for row in rows}
    assert not Path("harm").exists()


# Templates


TABLE = tomllib.loads((DATA / "templates.toml").read_text(encoding="utf-8"))["case"]


@pytest.mark.parametrize("case", TABLE, ids=[case["what"] for case in TABLE])
def test_a_broken_template_is_refused_before_anything_is_done(tmp_path, monkeypatch, case):
    monkeypatch.chdir(tmp_path)
    text, message = case["text"], case["message"]
    Path("t.toml").write_text(text, encoding="utf-8")
    with pytest.raises(StudyError) as caught:
        run("t.toml", ["x.cif"], "o")
    said = str(caught.value)
    assert said == f"t.toml: {message}" if message.endswith((".", "?")) else said.startswith(f"t.toml: {message}")
    assert not Path("o").exists()


def test_templates_that_do_not_fit_a_structure_fail_it_alone(work):
    data = "data_x\n_cell_length_a 4\n_cell_length_b 4\n_cell_length_c 4\n_cell_angle_alpha 90\n_cell_angle_beta 90\n"
    data += "_cell_angle_gamma 90\n_space_group_name_H-M_alt 'P 1'\nloop_\n_atom_site_label\n_atom_site_fract_x\n"
    Path("zinc.cif").write_text(data + "_atom_site_fract_y\n_atom_site_fract_z\nZn1 0 0 0\n", encoding="utf-8")
    Path("u.toml").write_text("[[probe]]\nposition = [0.5, 0, 0]\n", encoding="utf-8")
    run("t.toml", ["zinc.cif", "in/00001_rocksalt.cif"], "o1")
    assert records("o1")["zinc.cif"]["error"] == (
        "t.toml: `moments`: none of the names Mn, Fe, Co, Ni is a site or an element of this structure, which has Zn1, "
        "Zn."
    )
    assert records("o1")["in/00001_rocksalt.cif"]["status"] == "done"
    run("u.toml", ["zinc.cif"], "o2")
    assert records("o2")["zinc.cif"]["error"] == (
        "u.toml: there is no ordering to rank: the file holds no moments, and the template has neither [[ordering]] "
        "nor [propose]."
    )


def test_other_commands_are_tasks(work):
    assert {"rank", "field"} < set(known_tasks())
    text = '[batch]\ndo = ["rank"]\nrotate = true\ntol = 1e-8\n' + TEMPLATE.replace('title = "', '#"')
    Path("u.toml").write_text(text, encoding="utf-8")
    run("u.toml", ["in/00001_rocksalt.cif"], "o")
    (record,) = records("o").values()
    assert list(record["results"]) == ["rank"]
    for row in record["results"]["rank"]["rows"]:
        assert row["easy_axis_cart"] is None or len(row["easy_axis_cart"]) == 3
        assert [len(points) for points in row["fields"].values()] == [1]


def test_orderings_may_be_proposed(work):
    text = "[propose]\nsupercell = [1, 1, 2]\nalong = [0, 0, 1]\nnet_zero = true\nkeep = 2\n[moments]\n" + "".join(
        f"{element} = 2\n" for element in ("Mn", "Fe", "Co", "Ni")
    )
    Path("u.toml").write_text(text, encoding="utf-8")
    run("u.toml", ["in/00000_bilayer.cif", "in/00003_magnetic.mcif"], "o")
    found = records("o")
    rows = found["in/00000_bilayer.cif"]["results"]["rank"]["rows"]
    assert len(rows) == 2 and all(row["net_moment_muB_per_ion"] < 1e-9 for row in rows)
    names = [row["ordering"] for row in found["in/00003_magnetic.mcif"]["results"]["rank"]["rows"]]
    assert "in the file" in names and len(set(names)) == 3
    Path("u.toml").write_text("[propose]\nkeep = 2\n[[probe]]\nposition = [0.3, 0, 0]\n", encoding="utf-8")
    run("u.toml", ["in/00000_bilayer.cif"], "o2")
    assert "states no moment sizes" in records("o2")["in/00000_bilayer.cif"]["error"]


# Probes by rule


@pytest.fixture
def bilayer(tmp_path):
    import random

    path = tmp_path / "x.cif"
    path.write_text(bilayer_cif(random.Random(5)), encoding="utf-8")
    return ld.read_crystal(path)


def probes_of(tmp_path, table):
    (tmp_path / "s.toml").write_text(f'[crystal]\nfile = "x.cif"\n[[probe]]\n{table}\n', encoding="utf-8")
    return ld.read_study(tmp_path / "s.toml").probes


def test_every_site_of_an_element(bilayer, tmp_path):
    anion = next(s for s in bilayer.symbols if s in ("F", "O", "Cl"))
    isotope = {"F": "19F", "O": "17O", "Cl": "35Cl"}[anion]
    found = probes_of(tmp_path, f'rule = "every {anion} site"')
    assert [(p.site, p.particle, p.name) for p in found] == [
        (f"{anion}1", isotope, f"{isotope} at {anion}1"),
        (f"{anion}2", isotope, f"{isotope} at {anion}2"),
    ]
    with pytest.raises(StudyError, match=r"`probe\[1\].rule`: 'every Pb site' finds no place in this structure"):
        probes_of(tmp_path, 'rule = "every Pb site"')


def test_every_symmetry_distinct_site(bilayer, tmp_path):
    found = probes_of(tmp_path, 'rule = "every symmetry-distinct site"\nparticle = "19F"\nname = "n"')
    assert [p.name for p in found] == [f"n at {label}" for label in dict.fromkeys(bilayer.labels)]
    assert {p.particle for p in found} == {"19F"}


def test_points_far_from_atoms(bilayer, tmp_path):
    found = probes_of(tmp_path, 'rule = "points at least 1.2 Å from any atom"\nspacing_A = 0.8')
    points = np.array([p.position for p in found])
    gap = points[:, None] - bilayer.positions[None]
    nearest = np.min(
        [
            np.linalg.norm((gap + np.array([i, j, k])) @ bilayer.cell, axis=2).min(axis=1)
            for i in (-2, -1, 0, 1, 2) for j in (-2, -1, 0, 1, 2) for k in (-2, -1, 0, 1, 2)
        ], axis=0,
    )  # fmt: skip
    assert len(points) > 50 and nearest.min() >= 1.2
    assert found[0].name == f"muon {'1'.zfill(len(str(len(found))))}"
    # Nothing is left out: the same grid by brute force.
    counts = np.ceil(np.linalg.norm(bilayer.cell, axis=1) / 0.8 - 1e-9).astype(int)
    assert len(far_points(bilayer, 1e-9, 0.8)) > np.prod(counts) - bilayer.n_sites - 1


def test_too_many_points_are_refused_before_memory_is_taken(bilayer, tmp_path):
    with pytest.raises(StudyError) as caught:
        probes_of(tmp_path, 'rule = "points at least 1 Å from any atom"\nspacing_A = 0.005')
    assert "points in this cell; at most 10000000 are tried. Use a larger spacing_A." in str(caught.value)
    with pytest.raises(StudyError, match=r"are more than 20000 in this cell\. Use a larger spacing_A"):
        probes_of(tmp_path, 'rule = "points at least 1 Å from any atom"\nspacing_A = 0.1')


# Workers


def test_a_limit_below_what_a_worker_needs_is_refused(work):
    with pytest.raises(
        InputError, match=r"a worker takes \d+ MB before it reads any structure, so that a limit of 20 MB"
    ):
        ld.run_batch("t.toml", ["in"], "o", memory_MB=20)


def test_a_worker_that_cannot_start_is_told(work, monkeypatch):
    monkeypatch.setattr(batch_pool, "START", "raise SystemExit('no such library')")
    with pytest.raises(LatticedipError) as caught:
        ld.run_batch("t.toml", ["in"], "o")
    assert str(caught.value) == "a worker process cannot start: no such library"


@pytest.mark.parametrize(
    ("keywords", "message"),
    [
        ({"workers": 0}, "workers must be a whole number of at least 1, got 0."),
        ({"timeout_s": 0}, "timeout_s must be a number larger than 0, got 0."),
        ({"memory_MB": float("nan")}, "memory_MB must be a number larger than 0, got nan."),
        ({"executor": 3}, "executor must be a concurrent.futures.Executor, got int."),
    ],
)
def test_wrong_arguments(work, keywords, message):
    with pytest.raises(InputError) as caught:
        ld.run_batch("t.toml", ["in"], "o", **keywords)
    assert str(caught.value) == message


@pytest.mark.skipif(sys.platform != "linux", reason="reads /proc")
def test_ctrl_c_ends_all_with_one_message(work):
    before = lines()
    process = start_batch("t.toml", "in", "-o", "o", "--workers", 2)
    wait_for(lambda: Path("o/results.jsonl").exists() and Path("o/results.jsonl").stat().st_size > 0)
    workers = children(process.pid)
    os.killpg(process.pid, signal.SIGINT)
    assert process.communicate(timeout=60)[1] == b"Interrupted.\n"
    assert process.returncode == 130
    wait_for(lambda: not any(Path(f"/proc/{pid}").exists() for pid in workers))
    run("t.toml", ["in"], "o", resume=True)
    assert lines("o") == before


# Executors


@pytest.mark.parametrize("kind", ["threads", pytest.param("processes", marks=pytest.mark.slow)])
def test_any_executor_gives_the_same_bytes(work, kind):
    pool = ThreadPoolExecutor(2) if kind == "threads" else ProcessPoolExecutor(2, mp_context=get_context("spawn"))
    with pool as executor:
        result = ld.run_batch("t.toml", ["in"], "o", executor=executor)
    assert (result.done, result.failed) == (20, 1)
    assert lines("o") == lines()
    assert Path("o/results.csv").read_bytes() == Path("out/results.csv").read_bytes()


class BrokenAtThird(ThreadPoolExecutor):
    """Breaks with its third job."""

    count = 0

    def submit(self, *arguments, **keywords):
        self.count += 1
        if self.count < 3:
            return super().submit(*arguments, **keywords)
        future = Future()
        future.set_exception(BrokenProcessPool("a process died"))
        return future


def test_an_executor_that_breaks_loses_nothing(work):
    before = lines()
    with BrokenAtThird(1) as executor, pytest.raises(LatticedipError) as caught:
        ld.run_batch("t.toml", ["in"], "o", executor=executor)
    assert str(caught.value) == (
        "the executor broke down (BrokenProcessPool: a process died). What was finished is kept: go on with "
        "resume=True."
    )
    run("t.toml", ["in"], "o", resume=True)
    assert lines("o") == before


def test_limits_do_not_go_with_an_executor(work):
    with ThreadPoolExecutor(1) as executor, pytest.raises(InputError) as caught:
        ld.run_batch("t.toml", ["in"], "o", executor=executor, timeout_s=3)
    assert str(caught.value) == (
        "timeout_s is for the processes that a batch starts itself. With an executor, leave it out."
    )


def test_a_cluster_that_does_not_answer(work, monkeypatch):
    pytest.importorskip("distributed", reason="dask.distributed is not installed")
    monkeypatch.setattr("latticedip.study.batch.ANSWER_S", 1)
    result = command("t.toml", "in", "-o", "o", "--cluster", "tcp://127.0.0.1:9")
    assert result.exit_code == 2
    assert result.stderr.startswith("Error: no scheduler answers at 'tcp://127.0.0.1:9' (")


def test_limits_do_not_go_with_a_cluster(work):
    result = command("t.toml", "in", "-o", "o", "--cluster", "tcp://127.0.0.1:9", "--timeout", 3)
    assert result.exit_code == 2
    assert "--timeout is for processes on this machine; it does not go with --cluster." in result.stderr


# The command


def test_the_command_says_what_became_of_it(work):
    result = command("t.toml", "in/00001_rocksalt.cif", "in/00019_rocksalt.cif", "in/00001_rocksalt.cif", "-o", "o")
    assert result.exit_code == 1
    assert result.stdout == ""
    assert result.stderr == ("1 done, 1 failed, 1 skipped. Wrote o.\n  in/00019_rocksalt.cif: the file is empty.\n")
    result = command("t.toml", "in/00001_rocksalt.cif", "-o", "o2", "--quiet", "--json")
    assert (result.exit_code, result.stderr) == (0, "")
    assert result.stdout == Path("o2/summary.json").read_text(encoding="utf-8")
    document = json.loads(result.stdout)
    assert document["schema"] == "latticedip/batch/1"
    assert document["inputs"]["files"][0]["path"] == "t.toml"
    assert document["boundary"] == (
        "net moment without a stated shape: N = 0 assumed (a domain that closes its flux); no net moment: the shape of "
        "the sample does not matter (N = 0 sum)"
    )


def test_the_progress_bar(capsys):
    bar = ProgressBar()
    bar(Progress(total=200, done=50, failed=0, reused=0, per_second=12.34, seconds_left=75.2))
    bar(Progress(total=200, done=99, failed=1, reused=0, per_second=12.34, seconds_left=None))
    bar.clear()
    first, second, blank = capsys.readouterr().err.removeprefix("\r").split("\r", 2)
    assert first == "[######..................] 50/200, 12.3/s, 1:15 left"
    assert second.rstrip() == "[############............] 100/200, 12.3/s, 1 failed"
    assert blank.strip() == ""
