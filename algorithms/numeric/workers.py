"""Workers outside this process: other Pythons on this machine, or a Dask scheduler's.

Zonings are built by loops that hold Python's lock (shortest paths, spanning trees, short array
operations), so threads gain nothing; processes do. But the program that hosts the plugin is not
always a Python: on some platforms ``sys.executable`` is the desktop program itself, and starting
it again, which ``multiprocessing`` would do, opens a second window. So a worker is started only
from a file that is named like a Python, lies where this Python was installed, and has answered a
question in Python before. It gets its batches through its own pipe; nothing of the main program
is imported again.

A worker need not have the plugin on its path: the numeric core travels to it as a small archive.
"""

import base64
import io
import json
import os
import pickle
import subprocess
import sys
import threading
import zipfile
from concurrent.futures import Executor, Future, ThreadPoolExecutor
from concurrent.futures import TimeoutError as WaitTimeoutError
from contextlib import suppress
from pathlib import Path
from queue import SimpleQueue

from .errors import InputError

CORE = __package__
MOST_WORKERS = 8
START_SECONDS = 1.5  # until a worker has imported what it needs; 0.7 with warm disks
PROBE_SECONDS = 20
SCHEDULER_SECONDS = 10.0
BETWEEN_LOOKS = 0.1

# Runs by itself in another Python. The core comes from the archive, so that a worker never
# computes with another version than the one that asks; a process that runs the asking copy itself
# (a scheduler inside it) keeps that.
ARRIVAL = """
def steadfield_arrival(archive, package, payload):
    import hashlib, importlib, pickle, sys
    digest = hashlib.sha256(archive).hexdigest()
    known = sys.modules.get(package)
    if known is None or getattr(known, "archive_digest", digest) != digest:
        import atexit, os, shutil, tempfile
        root = package.split(".")[0]
        for name in [n for n in sys.modules if n == root or n.startswith(root + ".")]:
            del sys.modules[name]
        folder = tempfile.mkdtemp(prefix="steadfield-core-")
        atexit.register(shutil.rmtree, folder, True)
        path = os.path.join(folder, "core.zip")
        with open(path, "wb") as file:
            file.write(archive)
        sys.path.insert(0, path)
        importlib.invalidate_caches()
        importlib.import_module(package).archive_digest = digest
    function, arguments = pickle.loads(payload)
    return pickle.dumps(function(*arguments), protocol=4)
"""

PIPE_LOOP = """
import base64, json, pickle, sys
receive, send = sys.stdin.buffer, sys.stdout.buffer
sys.stdout = sys.stderr
def message():
    head = receive.read(8)
    return receive.read(int.from_bytes(head, "little")) if len(head) == 8 else None
settings = json.loads(message())
sys.path[:] = settings["path"]
exec(settings["arrival"])
archive = base64.b64decode(settings["archive"])
while True:
    payload = message()
    if payload is None:
        break
    try:
        answer = b"1" + steadfield_arrival(archive, settings["package"], payload)
    except BaseException as error:
        try:
            answer = b"0" + pickle.dumps(error)
        except Exception:
            answer = b"0" + pickle.dumps(RuntimeError(repr(error)))
    send.write(len(answer).to_bytes(8, "little") + answer)
    send.flush()
"""


def core_archive():
    """The numeric core as the bytes of a zip file, importable under the name it has here."""
    buffer = io.BytesIO()
    folder = Path(__file__).parent
    names = CORE.split(".")
    with zipfile.ZipFile(buffer, "w", zipfile.ZIP_DEFLATED) as archive:
        for depth in range(1, len(names)):
            _write(archive, "/".join(names[:depth]) + "/__init__.py", b"")
        for source in sorted(folder.glob("*.py")):
            _write(archive, "/".join(names) + "/" + source.name, source.read_bytes())
    return buffer.getvalue()


def real_python():
    """The path of a Python like this one that may be started, or None.

    Never ``sys.executable`` unseen: candidates are files named like a Python where this one is
    installed, and one counts only when it answers with this version and can import numpy, scipy
    and shapely.
    """
    ending = ".exe" if os.name == "nt" else ""
    version = f"{sys.version_info[0]}.{sys.version_info[1]}"
    names = [f"python{version}{ending}", f"python3{ending}", f"python{ending}"]
    folders = []
    for prefix in (sys.prefix, sys.exec_prefix, sys.base_prefix):
        folders += [Path(prefix), Path(prefix) / "bin"]
    for folder in dict.fromkeys(folders):
        for name in names:
            candidate = folder / name
            if candidate.is_file() and os.access(candidate, os.X_OK) and _answers(candidate):
                return str(candidate)
    return None


def _answers(candidate):
    question = (
        "import json, sys; sys.path[:] = json.loads(sys.argv[1]); import numpy, scipy, shapely; "
        "print(sys.version_info[:2] == tuple(json.loads(sys.argv[2])))"
    )
    asked = [str(candidate), "-c", question, json.dumps(_path()), json.dumps(sys.version_info[:2])]
    try:
        answer = subprocess.run(
            asked, capture_output=True, timeout=PROBE_SECONDS, stdin=subprocess.DEVNULL, **_unseen()
        )
    except (OSError, subprocess.SubprocessError):
        return False
    return answer.returncode == 0 and answer.stdout.strip() == b"True"


def local_workers(seconds):
    """Worker processes for work of so many seconds, where they would end it sooner, or None.

    Parameters
    ----------
    seconds : float
        What the work would take in this process alone.

    Returns
    -------
    PipeExecutor or None
    """
    workers = min(os.cpu_count() or 1, MOST_WORKERS)
    if workers < 2 or seconds / workers + START_SECONDS > 0.8 * seconds:
        return None
    python = real_python()
    if python is None:
        return None
    try:
        return PipeExecutor(python, workers)
    except OSError:
        return None


def call_watched(function, look, let_go):
    """Call a function that takes a while and look for cancellation meanwhile.

    Parameters
    ----------
    function : callable
        Takes nothing; runs on a thread of its own.
    look : callable
        Takes nothing; raises ``CancelledError`` when the user asked to stop.
    let_go : callable
        Is told the function's result when nobody waits for it any more.

    Returns
    -------
    object
        What the function returns.
    """
    asker = ThreadPoolExecutor(1)
    asked = asker.submit(function)
    asker.shutdown(wait=False)
    try:
        while True:
            look()
            try:
                return asked.result(timeout=BETWEEN_LOOKS)
            except (WaitTimeoutError, TimeoutError):
                if asked.done():
                    raise
    except BaseException:
        asked.add_done_callback(
            lambda done: let_go(done.result()) if done.exception() is None else None
        )
        raise


class PipeExecutor(Executor):
    """Worker processes of one Python, each fed through its own pipe.

    Parameters
    ----------
    python : str
        As :func:`real_python` finds it.
    workers : int
    """

    def __init__(self, python, workers):
        self._max_workers = workers
        self._tasks = SimpleQueue()
        self._closed = False
        settings = {
            "path": _path(),
            "arrival": ARRIVAL,
            "archive": base64.b64encode(core_archive()).decode(),
            "package": CORE,
        }
        greeting = json.dumps(settings).encode()
        self.processes = []
        self._threads = []
        self._alive = workers
        self._lock = threading.Lock()
        for _ in range(workers):
            process = subprocess.Popen(
                [python, "-c", PIPE_LOOP],
                stdin=subprocess.PIPE,
                stdout=subprocess.PIPE,
                stderr=subprocess.DEVNULL,
                **_unseen(),
            )
            thread = threading.Thread(target=self._serve, args=(process, greeting), daemon=True)
            self.processes.append(process)
            self._threads.append(thread)
            thread.start()

    def submit(self, function, /, *arguments):
        if self._closed:
            raise RuntimeError("the workers were sent home")
        future = Future()
        self._tasks.put((future, function, arguments))
        return future

    def shutdown(self, wait=True, *, cancel_futures=False):
        self._closed = True
        for _ in self._threads:
            self._tasks.put(None)
        if not wait:
            for process in self.processes:
                process.kill()
        for thread in self._threads:
            thread.join()

    def _serve(self, process, greeting):
        """Hand tasks to one worker until it is sent home or lost."""
        with suppress(OSError):  # a worker that is lost already is noticed at its first task
            _send(process, greeting)
        while True:
            task = self._tasks.get()
            if task is None:
                break
            future, function, arguments = task
            if not future.set_running_or_notify_cancel():
                continue
            try:
                _send(process, pickle.dumps((function, arguments), protocol=4))
                answer = _receive(process)
            except (OSError, EOFError):
                future.set_exception(ConnectionError("the worker was lost"))
                if self._others_alive():
                    break
                continue
            _settle(future, answer)
        for stream in (process.stdin, process.stdout):
            with suppress(OSError):
                stream.close()
        process.wait()

    def _others_alive(self):
        """Take a lost worker off the list; the last one stays to refuse the tasks that come."""
        with self._lock:
            if self._alive > 1:
                self._alive -= 1
                return True
            return False


def _send(process, payload):
    process.stdin.write(len(payload).to_bytes(8, "little"))
    process.stdin.write(payload)
    process.stdin.flush()


def _receive(process):
    head = process.stdout.read(8)
    if len(head) < 8:
        raise EOFError
    size = int.from_bytes(head, "little")
    answer = process.stdout.read(size)
    if len(answer) < size:
        raise EOFError
    return answer


class SchedulerExecutor(Executor):
    """The workers of a Dask scheduler; needs the package ``distributed``.

    Parameters
    ----------
    address : str
        Such as ``tcp://host:8786``.
    seconds : float, optional
        How long to wait for the scheduler.

    Raises
    ------
    InputError
        The package is missing, or no scheduler answers there, or it has no workers.
    """

    def __init__(self, address, seconds=None):
        try:
            from distributed import Client
        except ImportError as error:
            raise InputError(
                "SCHEDULER: a scheduler address needs the Python package distributed (2023.1 or "
                "later), which is not installed; install it with: python3 -m pip install "
                "distributed - or leave the address empty to work on this machine."
            ) from error
        try:
            self._client = Client(
                address, timeout=seconds or SCHEDULER_SECONDS, set_as_default=False
            )
        except (OSError, ValueError, TimeoutError) as error:
            raise InputError(
                "SCHEDULER: no Dask scheduler answers at {}; check the address, or leave it "
                "empty to work on this machine.",
                address,
            ) from error
        threads = self._client.nthreads()
        if not threads:
            self._client.close()
            raise InputError("SCHEDULER: the scheduler at {} has no workers.", address)
        self._max_workers = sum(threads.values())
        self._executor = self._client.get_executor(pure=False)
        scope = {}
        exec(ARRIVAL, scope)  # a function of no module travels by value
        self._arrival = scope["steadfield_arrival"]
        self._arrival.__module__ = "__main__"
        self._archive = core_archive()

    def submit(self, function, /, *arguments):
        payload = pickle.dumps((function, arguments), protocol=4)
        sent = self._executor.submit(self._arrival, self._archive, CORE, payload)
        future = Future()
        sent.add_done_callback(lambda done: _pass_on(done, future))
        future.add_done_callback(lambda done: sent.cancel() if done.cancelled() else None)
        return future

    def shutdown(self, wait=True, *, cancel_futures=False):
        self._executor.shutdown(wait=wait)
        self._client.close()


def _pass_on(done, future):
    """Settle a future as the scheduler's one was settled."""
    if not future.set_running_or_notify_cancel():
        return
    try:
        future.set_result(pickle.loads(done.result()))
    except BaseException as error:
        future.set_exception(error)


def _settle(future, answer):
    try:
        value = pickle.loads(answer[1:])
    except Exception as error:
        future.set_exception(error)
        return
    if answer[:1] == b"1":
        future.set_result(value)
    else:
        future.set_exception(value)


def _write(archive, name, content):
    archive.writestr(zipfile.ZipInfo(name), content, zipfile.ZIP_DEFLATED)


def _path():
    """This Python's search path without its empty entry, which would be the current folder."""
    return [entry for entry in sys.path if entry]


def _unseen():
    """Settings of a process that opens no window of its own."""
    return {"creationflags": subprocess.CREATE_NO_WINDOW} if os.name == "nt" else {}
