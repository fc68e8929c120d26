"""The count on a real Spark, local mode: the tables of the embedded engine, bit for bit."""

import os
import sys

import pandas as pd
import pytest

import cohortflow as cf
from cohortflow.errors import CallError, InputError, NotIdentified
from cohortflow.history.distribute import count_on_spark, read_on_spark
from cohortflow.history.warehouse import counting_sql

pytestmark = pytest.mark.engine
STATES = cf.States(["fresh", "steady", "left"], exits=["left"], entries=["fresh"])


@pytest.fixture(scope="module")
def spark():
    if "CI" not in os.environ:
        pytest.importorskip("pyspark")
    os.environ["PYSPARK_PYTHON"] = os.environ["PYSPARK_DRIVER_PYTHON"] = sys.executable
    from pyspark.sql import SparkSession

    builder = SparkSession.builder.master("local[2]").appName("cohortflow tests")
    settings = {"spark.ui.enabled": "false", "spark.sql.shuffle.partitions": "4", "spark.driver.memory": "1g"}
    for key, value in settings.items():
        builder = builder.config(key, value)
    session = builder.getOrCreate()
    yield session
    session.stop()


def same(one: cf.Tally, two: cf.Tally) -> None:
    assert one.meta == two.meta
    for name, table in one.tables.items():
        pd.testing.assert_frame_equal(two.tables[name], table)


@pytest.fixture(scope="module")
def demo_part(tmp_path_factory):
    """Some hundred members of the demo scenario, with its study file, as text files."""
    from cohortflow.runs.demo import write_demo
    from demo_data.generate import generate

    folder = write_demo(tmp_path_factory.mktemp("demo") / "veg")
    for path in folder.glob("events-*"):
        path.unlink()
    generate(members=400, months=36, seed=5).to_csv(
        folder / "events-all.csv.gz", index=False, compression="gzip"
    )
    return folder


def test_the_demo_scenario_counts_as_on_one_machine(spark, demo_part):
    study = cf.read_study(demo_part / "veg_box.toml")
    alone = cf.read(study)
    rows = spark.read.csv(str(demo_part / "events-all.csv.gz"), header=True).repartition(3)
    together = read_on_spark(rows, study, parts=4)
    same(alone.tally, together.tally)
    outcome = ["outcome", "reason"]
    mine, theirs = (
        h.check.to_frame().query("file == 'all'").groupby(outcome)["rows"].sum() for h in (alone, together)
    )
    pd.testing.assert_series_equal(mine, theirs)


def test_a_history_whose_parts_lack_whole_periods_counts_as_on_one_machine(spark, tmp_path):
    # customer c has rows in periods 1..3 only when the others make period 4 one that the extract has
    rows = [(c, t, "fresh" if t == 1 else "steady") for c, last in zip("abcd", (4, 2, 3, 1), strict=True)
            for t in range(1, last + 1)]  # fmt: skip
    frame = pd.DataFrame(rows, columns=["customer", "period", "state"])
    alone = cf.read_history(frame, STATES, on_absent="left")
    table = spark.createDataFrame(rows, ["customer", "period", "state"])
    together = count_on_spark(table, history_study(tmp_path), parts=4)
    # b leaves in 3, c in 4, d in 2: from fresh d; from steady b and c; stays: a 2->3, 3->4, c 2->3
    assert together.counts().tolist() == [[0, 3, 1], [0, 3, 2], [0, 0, 0]]
    assert (alone.tally.counts() == together.counts()).all()
    pd.testing.assert_frame_equal(alone.tally.tables["moves"], together.tables["moves"])


def history_study(folder) -> cf.study.Study:
    path = folder / "panel.toml"
    path.write_text(
        '[study]\nperiod = "step"\n[input]\nlayout = "history"\nfiles = ["none.csv"]\ncustomer = "customer"\n'
        'time = "period"\nstate = "state"\non_absent = "left"\n'
        '[[state]]\nname = "fresh"\nrole = "entry"\n[[state]]\nname = "steady"\n'
        '[[state]]\nname = "left"\nrole = "exit"\n'
    )
    return cf.read_study(path)


def test_refusals_reach_the_user_without_the_clusters_traceback(spark, tmp_path):
    study = history_study(tmp_path)
    blank = spark.createDataFrame([("", 1, "fresh"), ("a", 1, "fresh"), ("a", 2, "left")],
                                  ["customer", "period", "state"])  # fmt: skip
    with pytest.raises(InputError, match="blank or a placeholder in 1 of 3 rows"):
        count_on_spark(blank, study, parts=2)
    unknown = spark.createDataFrame([("a", 1, "fresh"), ("a", 2, "lefft")], ["customer", "period", "state"])
    with pytest.raises(InputError, match="lefft"):
        count_on_spark(unknown, study, parts=2)
    nobody = spark.createDataFrame([("a", 1, "fresh"), ("a", 2, "steady"), ("b", 2, "fresh")],
                                   ["customer", "period", "state"])  # fmt: skip
    with pytest.raises(NotIdentified, match="No customer ever reached an exit"):
        count_on_spark(nobody, study, parts=2)
    with pytest.raises(InputError, match='has no column "customer"'):
        count_on_spark(nobody.withColumnRenamed("customer", "who"), study)


def test_other_layouts_are_refused(demo_part):
    from dataclasses import replace

    study = cf.read_study(demo_part / "veg_box.toml")
    other = replace(study, input=replace(study.input, layout="counts"))
    with pytest.raises(CallError, match='this study has "counts"'):
        count_on_spark(None, other)


def test_the_counting_statement_runs_on_spark(spark):
    rows = [("a", 1, "fresh"), ("a", 2, "steady"), ("b", 1, "fresh"), ("b", 2, "left")]
    spark.createDataFrame(rows, ["customer", "period", "state"]).createOrReplaceTempView("member_months")
    found = spark.sql(counting_sql(STATES, table="member_months", dialect="spark")).collect()
    assert [tuple(r) for r in found] == [(1, "fresh", "left", 1), (1, "fresh", "steady", 1)]
