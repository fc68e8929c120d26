"""Tables as Parquet files."""

import pandas as pd

from cohortflow.history.export import write_parquet

FRAME = pd.DataFrame(
    {"state": ["=b", None, "weekly"], "n": pd.array([1, None, 3], dtype="Int64"), "share": [0.1, float("nan"), 1 / 3],
     "held": pd.array([True, None, False], dtype="boolean"), "note": pd.Series([None, None, None], dtype=object)}
)  # fmt: skip


def test_figures_text_and_gaps_come_back(tmp_path):
    write_parquet(FRAME, tmp_path / "tables" / "t.parquet")
    back = pd.read_parquet(tmp_path / "tables" / "t.parquet")  # independent: pyarrow reads it
    assert back["state"].tolist()[0] == "=b" and back["share"].iloc[2] == 1 / 3
    assert back["n"].isna().tolist() == [False, True, False] and back["n"].iloc[2] == 3
    assert (
        back["held"].tolist()[0] and back["note"].isna().all() and list(back.columns) == list(FRAME.columns)
    )


def test_the_same_bytes_and_an_empty_table(tmp_path):
    for name in ("a", "b"):
        write_parquet(FRAME, tmp_path / f"{name}.parquet")
    assert (tmp_path / "a.parquet").read_bytes() == (tmp_path / "b.parquet").read_bytes()
    write_parquet(FRAME.iloc[:0], tmp_path / "none.parquet")
    assert len(pd.read_parquet(tmp_path / "none.parquet")) == 0
