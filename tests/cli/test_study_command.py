"""The verb study on the command line: faults in one line, status from the ledger, a reason kept."""

import json

import pytest
from volmap_cli.main import main

from volmap.study.ledger import Entry, State, driving


def test_begin_status_exclude(tmp_path, capsys):
    (tmp_path / "rig").mkdir()
    (tmp_path / "rig" / "visit0_labels.nii.gz").write_bytes(b"volume")
    assert main(["study", "begin", str(tmp_path), "--json"]) == 0
    assert json.loads(capsys.readouterr().out)["subjects"] == 1
    assert main(["study", "status", str(tmp_path)]) == 3
    assert "holds no ledger" in capsys.readouterr().err
    with driving(tmp_path) as ledger:
        ledger.plan([Entry("map a v0 v1", "map", "a", "k", State.WAITING)])
        ledger.settle("map a v0 v1", State.REFUSED, sentence="torn", verdict="")
    assert main(["study", "exclude", str(tmp_path), "--job", "map a v0 v1", "--reason", "wrong visit"]) == 0
    capsys.readouterr()
    assert main(["study", "status", str(tmp_path), "--json"]) == 1
    told = json.loads(capsys.readouterr().out)
    assert told["counts"] == {"map": {"refused": 1}}
    assert told["troubles"] == [{"job": "map a v0 v1", "state": "refused", "sentence": "torn"}]
    assert told["excluded"] == {"map a v0 v1": "wrong visit"}


@pytest.mark.parametrize(
    ("words", "status", "sentence"),
    [
        (["status", "nowhere"], 3, "holds no ledger"),
        (["begin", "nowhere"], 3, "no such folder"),
        (["run", "nowhere"], 3, "no such file"),
        (["status", ".", "--workers", "2"], 2, "belongs to volmap study run"),
        (["exclude", "."], 2, "needs --job"),
        (["exclude", ".", "--job", "map a b"], 3, "holds no ledger"),
    ],
)
def test_faults_are_one_line(tmp_path, monkeypatch, capsys, words, status, sentence):
    monkeypatch.chdir(tmp_path)
    assert main(["study", *words]) == status
    told = capsys.readouterr().err
    assert sentence in told
    assert told.count("\n") == 1
    assert not list(tmp_path.iterdir())
