"""`cohortflow whatif`: what it prints, and what it refuses."""

import json

import pytest

from tests.test_runs_plans import made as made


def called(capsys, *arguments):
    from cohortflow.cli import main

    with pytest.raises(SystemExit) as ended:
        main(["whatif", *map(str, arguments)])
    out, err = capsys.readouterr()
    return ended.value.code, out, err


def test_scenarios_levers_and_the_change_needed(capsys, made):
    study, _ = made
    path = study.path
    code, out, _ = called(capsys, path, "--quiet")
    assert code == 0 and "What the scenarios would change" in out and "Levers: contribution of base" in out
    code, out, _ = called(capsys, path, "--target", "base:busy=45", "--lever", "here:busy", "--quiet")
    assert code == 0 and out.startswith("Change needed: customers in busy at the horizon") and "points" in out
    code, out, _ = called(capsys, path, "--format", "csv", "--quiet")
    assert (
        out.splitlines()[0]
        == "segment,scenario,period,quantity,base,with_change,difference,low,high,cost,net"
    )
    code, out, _ = called(capsys, path, "--format", "json", "--quiet")
    assert {"scenarios", "levers"} <= set(json.loads(out)["tables"])
    code, out, err = called(capsys, path, "--target", "base=many")
    assert code == 2 and out == "" and 'has the mark "many"' in err
