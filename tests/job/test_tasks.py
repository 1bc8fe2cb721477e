import os
import signal
import subprocess
import sys
import time
from dataclasses import replace
from io import StringIO
from pathlib import Path

import pytest

import portfire
from portfire.errors import InputError, PortfireError
from portfire.job import Store, run_tasks, task_key
from portfire.job._executor import SerialExecutor, local_executor
from portfire.job._progress import Progress
from portfire.job._stop import Stop, Stopped

SOURCE = str(Path(portfire.__file__).parents[1])


@pytest.fixture
def run(toys, store, tmp_path):
    """Return a runner of tasks; in this process unless given an executor."""

    def run(*tasks, executor=None, stop=None, stream=None):
        progress = Progress(tmp_path / "log.txt", stream=StringIO() if stream is None else stream)
        with progress:
            return run_tasks(
                tasks, store, executor or SerialExecutor(), progress, stop or Stop(), tmp_path / "data"
            )

    return run


def read_log(tmp_path):
    return (tmp_path / "log.txt").read_text()


def test_tasks_run_after_what_they_depend_on(run, make_task):
    tasks = [
        make_task("c", deps=("a", "b"), value=100),
        make_task("a", value=1),
        make_task("b", deps=("a",), value=10),
    ]
    found = run(*tasks)
    assert list(found) == [task.key for task in tasks]
    assert [meta["value"] for meta in found.values()] == [112, 1, 11]


def test_what_others_wait_for_starts_first(run, make_task, tmp_path):
    trace = str(tmp_path / "trace")
    tasks = [
        make_task("alone", value=0, trace=trace),
        make_task("first", value=0, trace=trace),
        make_task("second", deps=("first",), value=0, trace=trace),
        make_task("third", deps=("second",), value=0, trace=trace),
    ]
    run(*tasks)
    order = Path(trace).read_text().split()
    assert order[:2] == [task_key(name="first"), task_key(name="second")]


def test_a_second_run_repeats_nothing_and_finds_the_same(run, make_task, tmp_path):
    trace = tmp_path / "trace"
    tasks = [
        make_task("a", value=1, trace=str(trace)),
        make_task("b", deps=("a",), value=2, trace=str(trace)),
    ]
    first = run(*tasks)
    assert run(*tasks) == first
    assert len(trace.read_text().split()) == 2
    assert "b was there" in read_log(tmp_path)


def test_a_damaged_entry_is_redone_with_a_warning(run, make_task, store, tmp_path):
    trace, stream = tmp_path / "trace", StringIO()
    tasks = [
        make_task("a", value=1, trace=str(trace)),
        make_task("b", deps=("a",), value=2, trace=str(trace)),
    ]
    first = run(*tasks)
    (store.folder(tasks[0].key) / "arrays.npz").write_bytes(b"PK half")
    assert run(*tasks, stream=stream) == first
    assert trace.read_text().split() == [tasks[0].key, tasks[1].key, tasks[0].key]
    assert (
        f"{tasks[0].key}/arrays.npz: does not match its checksum; it is removed and redone"
        in stream.getvalue()
    )


def test_progress_counts_from_the_first_line_what_there_is_to_do(run, make_task):
    stream = StringIO()
    tasks = [make_task(name, value=1) for name in "abc"]
    run(*tasks)
    run(*tasks, stream=stream)
    assert stream.getvalue().startswith("toys: 1/3 fits")


def test_later_stages_may_build_on_earlier_ones(run, make_task):
    run(make_task("a", value=1))
    assert run(make_task("b", deps=("a",), value=2))[task_key(name="b")]["value"] == 3


def test_a_failing_task_is_named_and_what_waits_for_it_does_not_run(run, make_task, store, tmp_path):
    tasks = [
        make_task("a", value=1),
        make_task("bad", "fail", deps=("a",)),
        make_task("c", deps=("bad",), value=1),
    ]
    with pytest.raises(PortfireError, match=r"^bad failed: TwoWordsError: tyre flat$") as caught:
        run(*tasks)
    assert not isinstance(caught.value, InputError)
    assert store.list_keys() == (tasks[0].key,)
    assert "Traceback" in read_log(tmp_path)


def test_a_task_that_finds_the_input_wrong_says_so(run, make_task):
    with pytest.raises(InputError, match="unit 'u3' has no spikes"):
        run(make_task("bad", "reject"))


def test_a_task_without_a_result_fails(run, make_task):
    with pytest.raises(PortfireError, match=r"toy_tasks:forget left no result: .* no such entry"):
        run(make_task("bad", "forget"))


def test_impossible_orders_are_refused(run, make_task):
    with pytest.raises(ValueError, match=r"in a circle: a, b"):
        run(make_task("a", deps=("b",), value=1), make_task("b", deps=("a",), value=1))
    with pytest.raises(ValueError, match=r"a depends on .*, which is neither a task nor in the store"):
        run(make_task("a", deps=("nowhere",), value=1))
    a = make_task("a", value=1)
    with pytest.raises(ValueError, match=r"b and a have the same key"):
        run(a, replace(a, name="b"))


def test_a_run_that_was_asked_to_stop_does_not_start(run, make_task, store):
    stop = Stop()
    stop.ask()
    with pytest.raises(Stopped, match="0 of 1 fits; the same command resumes"):
        run(make_task("a", value=1), stop=stop)
    assert store.list_keys() == ()


def test_processes_run_single_threaded_and_are_gone_afterwards(run, make_task, tmp_path):
    before = dict(os.environ)
    with local_executor(1) as executor:
        found = run(make_task("p", "report_process"), executor=executor)[task_key(name="p")]
    assert found["XLA_FLAGS"].endswith("--xla_cpu_multi_thread_eigen=false intra_op_parallelism_threads=1")
    assert {found[name] for name in ("OMP_NUM_THREADS", "OPENBLAS_NUM_THREADS", "MKL_NUM_THREADS")} == {"1"}
    assert found["JAX_PLATFORMS"] == "cpu"
    assert found["data"] == str(tmp_path / "data")
    assert found["pid"] != os.getpid()
    assert not is_running(found["pid"])
    assert dict(os.environ) == before


def test_running_tasks_are_stored_when_another_fails(run, make_task, store):
    tasks = [
        make_task("slow", value=1, seconds=0.5),
        make_task("bad", "fail"),
        make_task("later", deps=("slow",), value=1),
    ]
    with local_executor(2) as executor, pytest.raises(PortfireError, match="bad failed"):
        run(*tasks, executor=executor)
    assert store.list_keys() == (tasks[0].key,)


def test_a_worker_that_dies_ends_the_run_with_a_sentence(run, make_task):
    with local_executor(1) as executor, pytest.raises(PortfireError, match="worker process ended while dead"):
        run(make_task("dead", "die"), executor=executor)


def is_running(pid):
    try:
        state = Path(f"/proc/{pid}/stat").read_text().rpartition(")")[2].split()[0]
    except OSError:
        return False
    return state != "Z"


PROGRAM = """
import sys
from pathlib import Path
from portfire.errors import PortfireError
from portfire.job import Task, open_workspace, task_key

def main():
    trace = sys.argv[2]
    slow = 60.0 * (sys.argv[3] == "slow")
    kwargs = [{"value": i, "seconds": 0.1 if i < 2 else slow, "trace": trace} for i in range(6)]
    tasks = [Task(f"t{i}", task_key(i=i), "toy_tasks:add", kwargs[i]) for i in range(6)]
    try:
        with open_workspace(Path(sys.argv[1]), workers=2, quiet=True) as workspace:
            found = workspace.run(tasks, workspace.data)
    except PortfireError as error:
        print(error, file=sys.stderr)
        sys.exit(1)
    print(sorted(meta["value"] for meta in found.values()))

if __name__ == "__main__":
    main()
"""


def start(tmp_path, pace):
    program = tmp_path / "program.py"
    program.write_text(PROGRAM)
    here = str(Path(__file__).parent)
    return subprocess.Popen(
        [sys.executable, str(program), str(tmp_path / "out"), str(tmp_path / "trace"), pace],
        env={**os.environ, "PYTHONPATH": os.pathsep.join([SOURCE, here])},
        stdout=subprocess.PIPE,
        stderr=subprocess.PIPE,
        text=True,
        start_new_session=True,
    )


def wait_for_first_results(tmp_path, process):
    trace, end = tmp_path / "trace", time.monotonic() + 20
    while time.monotonic() < end and process.poll() is None:
        if trace.exists() and len(trace.read_text().split()) >= 2:
            time.sleep(0.3)
            return
        time.sleep(0.05)
    process.kill()
    raise AssertionError(f"no results: {process.communicate()}")


def find_children(pid):
    found = []
    for entry in Path("/proc").iterdir():
        if entry.name.isdigit():
            try:
                parent = int((entry / "stat").read_text().rpartition(")")[2].split()[1])
            except OSError:
                continue
            if parent == pid:
                found.append(int(entry.name))
    return found


@pytest.mark.skipif(not Path("/proc/self/stat").exists(), reason="looks for processes in /proc")
@pytest.mark.parametrize("number", [signal.SIGTERM, signal.SIGINT, signal.SIGKILL])
def test_a_run_that_is_ended_by_a_signal_leaves_nothing_behind_and_resumes(tmp_path, number):
    process = start(tmp_path, "slow")
    wait_for_first_results(tmp_path, process)
    children = find_children(process.pid)
    asked = time.monotonic()
    if number == signal.SIGINT:  # as the terminal does it
        os.killpg(process.pid, number)
    else:
        process.send_signal(number)
    _, said = process.communicate(timeout=60)
    assert time.monotonic() - asked < 3
    end = time.monotonic() + 5
    while any(is_running(pid) for pid in children) and time.monotonic() < end:
        time.sleep(0.05)
    assert len(children) >= 2
    assert [pid for pid in children if is_running(pid)] == []
    if number == signal.SIGKILL:
        assert process.returncode == -signal.SIGKILL
    else:
        assert process.returncode == 1
        assert said == "Stopped after 2 of 6 fits; the same command resumes from what is stored.\n"
    store = Store(tmp_path / "out" / "fits")
    assert [store.fault(key) for key in store.list_keys()] == [None, None]

    again = start(tmp_path, "fast")
    told, said = again.communicate(timeout=120)
    assert (again.returncode, told, said) == (0, "[0, 1, 2, 3, 4, 5]\n", "")
    assert len((tmp_path / "trace").read_text().split()) == 6
    assert sorted(p.name for p in store.path.iterdir()) == sorted(store.list_keys())
