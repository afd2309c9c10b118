"""`tallyward serve` as an operator meets it: started, interrupted, killed, misconfigured.

The web application is a small one of these tests, so that the supervision is tested alone.
"""

from __future__ import annotations

import contextlib
import http.client
import json
import os
import signal
import socket
import stat
import subprocess
import sys
from collections.abc import Iterator
from pathlib import Path

import pytest
import redis

from service.serving import _command
from service.settings import Settings
from service.store.embedded import EmbeddedStore, find_server
from tests.processes import alive, children, eventually, free_port

APPLICATION = """
import json, os, time
import redis

def application(environ, start_response):
    path = environ["PATH_INFO"]
    if path == "/slow":
        open(os.environ["SLOW_BEGAN"], "w").close()
        time.sleep(1)
    if path == "/hang":
        open(os.environ["SLOW_BEGAN"], "w").close()
        time.sleep(600)
    if path == "/count":
        with redis.Redis.from_url(os.environ["TALLYWARD_REDIS_URL"]) as store:
            answer = {"count": store.incr("count")}
    else:
        answer = {k: v for k, v in os.environ.items() if k.startswith("TALLYWARD_")}
        answer |= {"pid": os.getpid(), "parent": os.getppid()}
    start_response("200 OK", [("Content-Type", "application/json")])
    return [json.dumps(answer).encode()]
"""
SERVE = """
import os, sys
from service.serving import ServingError, serve
from service.serving import _command
from service.settings import Settings
from service.store.errors import StoreError

def ready(running):
    print(running.url, running.key_file, flush=True)

try:
    serve(Settings.from_environment(os.environ), ready, app=sys.argv[1])
except (ServingError, StoreError) as error:
    sys.exit(f"Error: {error}")
"""
REPOSITORY = Path(__file__).parents[1]
KEY = "a-key-of-the-tests-0123456789-0123456789"


class Service:
    """A service as a child process, with what it said."""

    def __init__(self, folder: Path, **variables: str) -> None:
        (folder / "tested_application.py").write_text(APPLICATION)
        self.folder = folder
        self.port = free_port()
        self.environment = {
            **os.environ,
            "PYTHONPATH": os.pathsep.join((str(folder), str(REPOSITORY))),
            "SLOW_BEGAN": str(folder / "slow-began"),
            "TALLYWARD_BIND": f"127.0.0.1:{self.port}",
            "TALLYWARD_DATA": str(folder / "data"),
            "TALLYWARD_WORKERS": "1",
            "TALLYWARD_THREADS": "2",
        } | {f"TALLYWARD_{name}": value for name, value in variables.items()}
        self.app = "tested_application:application"

    def start(self) -> str:
        """Start it and return the line it prints when it is ready; empty if it ended."""
        with open(self.folder / "stderr", "ab") as stderr:
            self.process = subprocess.Popen(
                [sys.executable, "-c", SERVE, self.app],
                env=self.environment,
                cwd=self.folder,
                stdout=subprocess.PIPE,
                stderr=stderr,
                text=True,
            )
        return self.process.stdout.readline()

    def get(self, path: str = "/") -> dict:
        line = http.client.HTTPConnection("127.0.0.1", self.port, timeout=30)
        with contextlib.closing(line):
            line.request("GET", path)
            return json.loads(line.getresponse().read())

    def end(self, number: int = signal.SIGTERM) -> int:
        self.process.send_signal(number)
        status = self.process.wait()
        self.process.stdout.close()
        return status

    @property
    def said(self) -> str:
        return (self.folder / "stderr").read_text()


@pytest.fixture
def service(tmp_path: Path) -> Iterator[Service]:
    service = Service(tmp_path, LOG_LEVEL="warning")
    yield service
    if service.process.poll() is None:
        service.end(signal.SIGKILL)
    service.process.stdout.close()  # of one that ended by itself


@pytest.mark.parametrize("number", [signal.SIGINT, signal.SIGTERM, signal.SIGHUP])
def test_stops_cleanly_and_keeps_what_was_counted(service, number):
    for expected in (1, 2):
        service.start()
        assert service.get("/count") == {"count": expected}
        descendants = children(service.process.pid)
        assert len(descendants) == 2  # the store and gunicorn
        assert service.end(number) == 0
        assert not any(alive(pid) for pid in descendants)
    assert service.said == ""


def test_workers_get_their_settings_by_environment_and_no_secret_is_an_argument(service):
    service.environment["TALLYWARD_ADMIN_KEY"] = KEY
    ready = service.start()
    got = service.get()
    assert got["TALLYWARD_ADMIN_KEY"] == KEY
    assert got["TALLYWARD_REDIS_URL"] == f"unix://{service.folder}/data/store.sock"
    assert ready.split() == [f"http://127.0.0.1:{service.port}", "None"]
    assert not (service.folder / "data" / "admin-key").exists()
    for pid in (service.process.pid, *children(service.process.pid), got["pid"]):
        assert KEY.encode() not in Path(f"/proc/{pid}/cmdline").read_bytes()


@pytest.mark.parametrize(("given", "found"), [({}, "1"), ({"MALLOC_ARENA_MAX": "8"}, "8")])
def test_threads_share_one_heap_unless_the_operator_says_otherwise(service, given, found):
    service.environment |= given
    service.start()
    environment = Path(f"/proc/{service.get()['pid']}/environ").read_bytes().split(b"\0")
    assert f"MALLOC_ARENA_MAX={found}".encode() in environment


def test_health_is_never_without_a_thread_nor_a_connection_without_a_file():
    least = Settings()
    most = Settings(max_posting=64, threads=256, max_waiting=64)
    for settings in (least, most):
        options = dict(part[2:].split("=") for part in _command(settings, "a:b") if "=" in part)
        threads = int(options["threads"])
        assert threads > settings.max_posting + settings.threads + 2 * settings.max_waiting
        assert threads < int(options["worker-connections"]) < 1000


def test_relative_data_folder_means_the_same_to_the_workers(service):
    service.environment["TALLYWARD_DATA"] = "data"
    service.start()
    assert service.get()["TALLYWARD_DATA"] == str(service.folder / "data")


def test_admin_key_is_made_once_and_kept_for_the_owner_only(service):
    file = service.folder / "data" / "admin-key"
    keys = set()
    for _ in range(2):
        assert service.start().split()[1] == str(file)
        keys.add(service.get()["TALLYWARD_ADMIN_KEY"])
        service.end()
    (key,) = keys
    assert file.read_text().strip() == key
    assert Settings(admin_key=key).admin_key == key
    assert stat.S_IMODE(file.stat().st_mode) == 0o600


def test_damaged_admin_key_is_said(service):
    (service.folder / "data").mkdir()
    (service.folder / "data" / "admin-key").write_text("")
    assert service.start() == ""
    assert service.process.wait() == 1
    assert "holds no usable key" in service.said
    assert not children(service.process.pid)


def test_given_server_is_used_and_left_running(service, store_url):
    service.environment["TALLYWARD_REDIS_URL"] = store_url
    assert service.start().split()[1] == "None"
    assert service.get()["TALLYWARD_REDIS_URL"] == store_url
    assert "TALLYWARD_ADMIN_KEY" not in service.get()
    assert service.end() == 0
    assert not (service.folder / "data").exists()
    with redis.Redis.from_url(store_url) as client:
        assert client.ping()


def test_port_in_use_is_one_line_and_starts_nothing(service):
    with socket.socket() as taken:
        taken.bind(("127.0.0.1", service.port))
        taken.listen()
        assert service.start() == ""
        assert service.process.wait() == 1
    assert service.said == (
        f"Error: the address 127.0.0.1:{service.port} is in use: stop what listens there, or set "
        "TALLYWARD_BIND to another\n"
    )
    assert not (service.folder / "data").exists()


def test_data_folder_in_use_is_said(service):
    with EmbeddedStore(service.folder / "data", find_server()):
        assert service.start() == ""
        assert service.process.wait() == 1
    assert f"is in use by process {os.getpid()}" in service.said


def test_application_that_cannot_be_loaded_ends_everything(service):
    service.app = "tested_application:missing"
    assert service.start() == ""
    assert service.process.wait() == 1
    assert "Failed to find attribute 'missing'" in service.said
    assert "the web server ended by itself, with status 4" in service.said
    with EmbeddedStore(service.folder / "data") as store:  # its lock is free
        assert store.pid


def test_gunicorn_that_is_killed_ends_the_service_with_an_error(service):
    service.start()
    master = service.get()["parent"]
    store = [pid for pid in children(service.process.pid) if pid != master]
    os.kill(master, signal.SIGKILL)
    assert service.process.wait() == 1
    assert "the web server ended by itself, by signal 9" in service.said
    assert not any(alive(pid) for pid in store)


def test_worker_that_is_killed_is_replaced(service):
    service.start()
    worker = service.get()["pid"]
    os.kill(worker, signal.SIGKILL)
    eventually(lambda: not alive(worker), "end of the worker")
    assert service.get()["pid"] != worker
    assert service.end() == 0


def test_store_that_is_killed_comes_back_under_the_running_workers(service):
    service.start()
    assert service.get("/count") == {"count": 1}
    master = service.get()["parent"]
    (store,) = (pid for pid in children(service.process.pid) if pid != master)
    os.kill(store, signal.SIGKILL)
    eventually(lambda: not alive(store), "end of the store")
    counts = []

    def counted() -> bool:
        with contextlib.suppress(json.JSONDecodeError):  # the page of an error 500
            counts.append(service.get("/count")["count"])
        return bool(counts)

    eventually(counted, "a new store")
    assert counts == [2]  # what was counted was in the file, and nothing was counted twice
    assert service.end() == 0


@pytest.mark.skipif(sys.platform != "linux", reason="needs Linux: parent-death signal")
def test_nothing_outlives_a_killed_parent_and_the_next_start_works(service):
    service.start()
    assert service.get("/count") == {"count": 1}
    worker = service.get()["pid"]
    everyone = [worker, *children(service.process.pid)]
    service.end(signal.SIGKILL)
    eventually(lambda: not any(alive(pid) for pid in everyone), "end of the orphans")
    service.start()
    assert service.get("/count") == {"count": 2}
    assert service.end() == 0


def begin(service: Service, path: str) -> http.client.HTTPConnection:
    line = http.client.HTTPConnection("127.0.0.1", service.port, timeout=60)
    line.request("GET", path)
    eventually(lambda: (service.folder / "slow-began").exists(), "the slow request")
    return line


def test_running_request_is_answered_before_the_end(service):
    service.start()
    with contextlib.closing(begin(service, "/slow")) as line:
        service.process.send_signal(signal.SIGTERM)
        assert line.getresponse().status == 200
        assert service.process.wait() == 0


def test_second_signal_does_not_wait_for_a_hanging_request(service):
    service.environment |= {"TALLYWARD_TIMEOUT": "600", "TALLYWARD_LOG_LEVEL": "info"}
    service.start()
    with contextlib.closing(begin(service, "/hang")):
        service.process.send_signal(signal.SIGINT)
        eventually(lambda: "Handling signal: term" in service.said, "the first signal's effect")
        assert service.end(signal.SIGINT) == 0


class TestCommand:
    def run(self, *arguments: str, **variables: str) -> subprocess.CompletedProcess[str]:
        return subprocess.run(
            [sys.executable, "-m", "service.cli", *arguments],
            env={**os.environ, **{f"TALLYWARD_{k}": v for k, v in variables.items()}},
            cwd=REPOSITORY,
            capture_output=True,
            text=True,
        )

    def test_wrong_settings_are_listed_before_anything_starts(self, tmp_path):
        done = self.run("serve", WORKERS="0", THREAD="3", DATA=str(tmp_path / "d"))
        assert done.returncode == 2
        assert "TALLYWARD_WORKERS must be 1 to 128, got 0" in done.stderr
        assert "did you mean TALLYWARD_THREADS?" in done.stderr
        assert "Traceback" not in done.stderr
        assert not (tmp_path / "d").exists()

    def test_port_in_use(self, tmp_path):
        with socket.socket() as taken:
            taken.bind(("127.0.0.1", 0))
            taken.listen()
            bind = "{}:{}".format(*taken.getsockname())
            done = self.run("serve", BIND=bind, DATA=str(tmp_path / "d"))
        assert done.returncode == 1
        assert done.stderr.startswith(f"Error: the address {bind} is in use")
        assert done.stderr.count("\n") == 1

    def test_settings_are_listed(self):
        said = self.run("settings").stdout
        for setting in Settings.table():
            assert f"{setting.name}={setting.default}\n" in said

    def test_demo_without_a_key(self, tmp_path):
        done = self.run("demo", DATA=str(tmp_path))
        assert done.returncode == 1
        assert "no key: set TALLYWARD_ADMIN_KEY" in done.stderr

    def test_demo_without_a_service_says_so(self, tmp_path):
        done = self.run("demo", "--url", "ftp://nowhere", ADMIN_KEY=KEY, DATA=str(tmp_path))
        assert done.returncode == 1
        assert "not an http or https address" in done.stderr
