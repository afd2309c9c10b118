"""What a client of the store does when something goes wrong: nothing twice, nothing torn."""

from __future__ import annotations

import os
import signal
import socket
import threading
from collections.abc import Iterator
from contextlib import closing
from pathlib import Path

import pytest
import redis
import redis.exceptions

from service.store.connection import connect, inspect
from service.store.embedded import EmbeddedStore
from service.store.errors import StoreError, surely_not_applied


@pytest.fixture
def client(fresh_store: str) -> Iterator[redis.Redis]:
    with closing(connect(fresh_store, timeout=5)) as client:
        yield client


def failure(call, *args, **options) -> BaseException:
    with pytest.raises(redis.exceptions.RedisError) as caught:
        call(*args, **options)
    return caught.value


def connections(client: redis.Redis) -> list:
    return [c for c in client.connection_pool._connections if c._sock is not None]


class TestConnect:
    def test_replies_are_bytes(self, client):
        client.set("a", "1")
        assert client.get("a") == b"1"

    @pytest.mark.parametrize(
        ("url", "says"),
        [
            ("redis+cluster://h:1,h:2", "not supported yet"),
            ("http://h", "must begin with redis://"),
            ("redis://:secret@h:port/0", "cannot be read"),
        ],
    )
    def test_unusable_address_is_said_without_its_password(self, url, says):
        with pytest.raises(StoreError, match=says) as caught:
            connect(url, timeout=1)
        assert "secret" not in str(caught.value)

    def test_options_in_the_address_cannot_turn_retries_on(self, fresh_store):
        url = fresh_store + "?socket_timeout=77&retry_on_timeout=yes&health_check_interval=1"
        with closing(connect(url, timeout=3)) as client:
            client.ping()
            (connection,) = connections(client)
            assert connection.socket_timeout == 3
            assert connection.retry.get_retries() == 0
            assert not connection.retry_on_timeout
            assert connection.health_check_interval == 0

    def test_pool_is_bounded(self, fresh_store):
        with closing(connect(fresh_store, timeout=0.05, connections=1)) as client:
            taken = client.connection_pool.get_connection()
            error = failure(client.ping)
            client.connection_pool.release(taken)
            assert surely_not_applied(error)
            assert client.ping()


class TestAfterAnError:
    def test_a_timed_out_command_is_sent_once_and_its_late_reply_is_never_read(self, lone_store):
        with closing(connect(lone_store.url, timeout=0.3)) as client:
            client.set("calls", 0)
            os.kill(lone_store.pid, signal.SIGSTOP)
            try:
                error = failure(client.incr, "calls")
            finally:
                os.kill(lone_store.pid, signal.SIGCONT)
            assert isinstance(error, redis.exceptions.TimeoutError)
            assert not surely_not_applied(error)
            assert connections(client) == []
            with closing(connect(lone_store.url, timeout=10)) as patient:
                assert patient.incr("calls") == 2  # the first was applied after all, once

    def test_a_broken_reply_in_a_pipeline_leaves_no_replies_for_the_next_user(self, client):
        client.set_response_callback("GET", lambda reply, **_: 1 // 0)
        pipeline = client.pipeline(transaction=False)
        pipeline.get("a").set("b", "1").set("c", "2")
        with pytest.raises(ZeroDivisionError):
            pipeline.execute()
        assert connections(client) == []
        assert client.echo("own reply") == b"own reply"

    def test_a_refused_command_closes_its_connection(self, client):
        client.set("word", "x")
        failure(client.incr, "word")
        assert connections(client) == []

    def test_error_values_in_a_pipeline_are_returned_and_the_connection_kept(self, client):
        client.set("word", "x")
        pipeline = client.pipeline(transaction=False)
        refused, done = pipeline.incr("word").set("b", 1).execute(raise_on_error=False)
        assert isinstance(refused, redis.exceptions.ResponseError)
        assert done is True
        assert len(connections(client)) == 1

    def test_a_dead_server_is_surely_not_applied_before_sending(self, tmp_path):
        with closing(connect(f"unix://{tmp_path}/nobody.sock", timeout=1)) as client:
            assert surely_not_applied(failure(client.incr, "calls"))

    def test_refused_tcp_connection_is_surely_not_applied(self):
        with socket.socket() as taken:
            taken.bind(("127.0.0.1", 0))  # bound, not listening
            with closing(connect(f"redis://127.0.0.1:{taken.getsockname()[1]}", 1)) as client:
                assert surely_not_applied(failure(client.incr, "calls"))

    def test_a_peer_that_hangs_up_after_reading_is_unknown(self, tmp_path):
        path = str(tmp_path / "s")
        with socket.socket(socket.AF_UNIX) as server:
            server.bind(path)
            server.listen()

            def hang_up() -> None:
                line, _ = server.accept()
                with line:
                    while (said := line.recv(4096)) and b"INCR" not in said:
                        line.sendall(b"+OK\r\n" * said.count(b"SETINFO"))

            thread = threading.Thread(target=hang_up)
            thread.start()
            with closing(connect(f"unix://{path}", timeout=5)) as client:
                error = failure(client.incr, "calls")
            thread.join()
        assert isinstance(error, redis.exceptions.ConnectionError)
        assert not surely_not_applied(error)


class TestRefusalsOfRealServers:
    def test_full_store(self, client):
        client.config_set("maxmemory", "100kb")
        assert surely_not_applied(failure(client.set, "a", "x"))
        script = "#!lua\nredis.call('set', KEYS[1], 'x')"
        assert surely_not_applied(failure(client.eval, script, 1, "a"))
        client.config_set("maxmemory", "0")
        assert client.get("a") is None

    def test_script_that_fails_in_the_middle_is_unknown(self, client):
        script = "redis.call('set', KEYS[1], 'x') redis.call('incr', KEYS[1])"
        assert not surely_not_applied(failure(client.eval, script, 1, "a"))
        assert client.get("a") == b"x"  # not rolled back

    def test_refusal_raised_by_a_running_script_is_treated_as_unknown(self, client):
        client.config_set("maxmemory", "100kb")
        script = "redis.call('set', KEYS[1], 'x')"  # no header: it starts, and then is refused
        assert not surely_not_applied(failure(client.eval, script, 1, "a"))

    def test_replica(self, client):
        client.replicaof("127.0.0.1", "1")
        try:
            assert surely_not_applied(failure(client.set, "a", "x"))
        finally:
            client.replicaof("no", "one")

    def test_too_few_replicas(self, client):
        client.config_set("min-replicas-to-write", "1")
        assert surely_not_applied(failure(client.set, "a", "x"))

    def test_unknown_script(self, client):
        assert surely_not_applied(failure(client.evalsha, "0" * 40, 0))

    def test_busy_script(self, client, fresh_store):
        client.config_set("busy-reply-threshold", "10")
        with closing(connect(fresh_store, timeout=30)) as other:
            thread = threading.Thread(target=failure, args=(other.eval, "while true do end", 0))
            thread.start()
            error = None
            while error is None:
                try:
                    client.set("a", "x")
                except redis.exceptions.ResponseError as busy:
                    error = busy
            client.script_kill()
            thread.join()
        assert str(error).startswith("BUSY")
        assert surely_not_applied(error)

    def test_forbidden_by_acl(self, client, fresh_store):
        client.acl_setuser("reader", enabled=True, passwords=["+pw"], commands=["+@read"], keys="*")
        with closing(connect(fresh_store + "?username=reader&password=pw", 5)) as reader:
            assert surely_not_applied(failure(reader.set, "a", "x"))
        with closing(connect(fresh_store + "?username=reader&password=no", 5)) as stranger:
            assert surely_not_applied(failure(stranger.get, "a"))
        client.acl_deluser("reader")


@pytest.mark.parametrize(
    "text",
    [
        "MISCONF Redis is configured to save RDB snapshots",
        "CLUSTERDOWN Hash slot not served",
        "MOVED 3999 127.0.0.1:6381",
        "NOREPLICAS Not enough good replicas to write.",
    ],
)
def test_refusal_by_its_first_word(text):
    assert surely_not_applied(redis.exceptions.ResponseError(text))


@pytest.mark.parametrize(
    "error",
    [
        redis.exceptions.TimeoutError("Timeout reading from socket"),
        redis.exceptions.ConnectionError("Connection closed by server."),
        redis.exceptions.ResponseError("WRONGTYPE Operation against a key"),
        redis.exceptions.ResponseError("OOMs are not refusals"),
        ValueError("MOVED"),
    ],
)
def test_anything_else_is_unknown(error):
    assert not surely_not_applied(error)


class TestInspect:
    def test_facts_of_the_embedded_store(self, client, store_binary: Path):
        facts = inspect(client)
        assert facts.server == ("valkey" if "valkey" in store_binary.name else "redis")
        assert int(facts.version.split(".")[0]) >= 7
        assert (facts.role, facts.replicas, facts.clustered) == ("master", 0, False)
        assert facts.durability == "everysec"
        assert facts.persisting
        assert not facts.loading
        assert facts.maxmemory_policy == "noeviction"
        assert facts.maxmemory == 0
        assert facts.used_memory > 100_000

    @pytest.mark.parametrize(
        ("fsync", "durability"), [("always", "always"), ("everysec", "everysec"), ("no", "none")]
    )
    def test_durability_follows_the_server(self, client, fsync, durability):
        client.config_set("appendfsync", fsync)
        assert inspect(client).durability == durability

    def test_no_append_only_file(self, client):
        client.config_set("appendonly", "no")
        assert inspect(client).durability == "none"

    def test_eviction_and_role_are_seen(self, client):
        client.config_set("maxmemory", "50mb")
        client.config_set("maxmemory-policy", "allkeys-lru")
        client.replicaof("127.0.0.1", "1")
        try:
            facts = inspect(client)
        finally:
            client.replicaof("no", "one")
        assert (facts.maxmemory_policy, facts.maxmemory) == ("allkeys-lru", 50 * 2**20)
        assert facts.role == "slave"

    def test_forbidden_config_is_unknown_not_an_error(self, client, fresh_store):
        client.acl_setuser(
            "guest", enabled=True, passwords=["+pw"], commands=["+@all", "-config"], keys="*"
        )
        with closing(connect(fresh_store + "?username=guest&password=pw", 5)) as guest:
            facts = inspect(guest)
        client.acl_deluser("guest")
        assert facts.durability == "unknown"
        assert facts.maxmemory_policy == "noeviction"

    def test_run_id_changes_when_the_server_was_restarted(self, store_binary, tmp_path):
        seen = set()
        for _ in range(2):
            with (
                EmbeddedStore(tmp_path / "d", store_binary) as store,
                closing(connect(store.url, 5)) as client,
            ):
                seen.add(inspect(client).run_id)
        assert len(seen) == 2
