"""The counting statement on a real PostgreSQL server, started here as an ordinary user on a socket of its own."""

import os
import pwd
import shutil
import subprocess
from pathlib import Path

import pandas as pd
import pytest

import cohortflow as cf
from cohortflow.history.warehouse import counting_sql

pytestmark = pytest.mark.engine
HOSTILE = 'a"; drop table x; --'
STATES = cf.States(["fresh", "it's steady", "left"], exits=["left"], entries=["fresh"])


def binaries() -> Path | None:
    found = sorted(Path("/usr/lib/postgresql").glob("*/bin/initdb")) if shutil.which("initdb") is None else []
    return (
        found[-1].parent
        if found
        else (Path(shutil.which("initdb") or "").parent if shutil.which("initdb") else None)
    )


@pytest.fixture(scope="module")
def server(tmp_path_factory):
    bin_folder = binaries()
    if bin_folder is None:
        assert "CI" not in os.environ, "CI must have PostgreSQL (.ci/run installs it)"
        pytest.skip("no PostgreSQL on this machine")
    folder = Path(tmp_path_factory.mktemp("pg"))
    who: dict = {}
    if os.getuid() == 0:  # the server refuses to run as root
        nobody = pwd.getpwnam("postgres")
        os.chown(folder, nobody.pw_uid, nobody.pw_gid)
        for parent in folder.parents[:3]:
            parent.chmod(0o755)
        who = {"user": "postgres"}

    def call(*command: str) -> None:
        subprocess.run(command, check=True, capture_output=True, cwd=folder, **who)

    data = str(folder / "data")
    call(str(bin_folder / "initdb"), "-D", data, "-A", "trust", "-U", "postgres")
    options = f"-c listen_addresses='' -c unix_socket_directories='{folder}'"
    call(str(bin_folder / "pg_ctl"), "-D", data, "-w", "-l", str(folder / "log"), "-o", options, "start")
    yield folder
    call(str(bin_folder / "pg_ctl"), "-D", data, "-m", "immediate", "stop")


def test_postgres_counts_what_the_history_room_counts(server):
    import psycopg

    paths = {"a": ["fresh", "it's steady", "left"], "b": ["fresh", "it's steady"], "c": ["fresh"],
             "d": ["fresh", "", "it's steady"]}  # fmt: skip
    rows = [(who, t, s) for who, path in paths.items() for t, s in enumerate(path, start=1) if s]
    sql = counting_sql(STATES, table=HOSTILE, on_absent="left", dialect="postgres")
    with psycopg.connect(host=str(server), user="postgres", dbname="postgres") as connection:
        name = HOSTILE.replace('"', '""')
        connection.execute(f'CREATE TABLE "{name}" (customer text, period int, state text)')
        with connection.cursor() as cursor:
            cursor.executemany(f'INSERT INTO "{name}" VALUES (%s, %s, %s)', rows)
        found = connection.execute(sql).fetchall()
    frame = pd.DataFrame(rows, columns=["customer", "period", "state"])
    tally = cf.count(cf.read_history(frame, STATES, on_absent="left"))
    back = cf.read_counts(found, STATES)
    # from fresh in 1: a and b to steady, c gone in 2, d seen again only in 3; from steady in 2: a and b leave
    assert back.counts().tolist() == [[0, 2, 1], [0, 0, 2], [0, 0, 0]]
    assert (back.counts() == tally.counts()).all()
