"""``lozenge order`` on the terminal: what is printed, what is written, how it ends."""

from __future__ import annotations

import json
from pathlib import Path

import numpy as np
import pytest
from numpy.typing import NDArray

from lozenge_dashboard import cli
from lozenge_engine.kernels.points import sprinkle

N = 400


@pytest.fixture(scope="module")
def folder(tmp_path_factory: pytest.TempPathFactory) -> Path:
    """A sprinkling of 400 elements as relations and links, with two regions."""
    folder = tmp_path_factory.mktemp("order")
    points = sprinkle(density=N / 2, seed=8, fixed=True)
    u, v = points.u, points.v
    c: NDArray[np.bool_] = (u[:, None] < u) & (v[:, None] < v)
    np.save(folder / "all.npy", c)
    links = c & ~((c.astype(float) @ c.astype(float)) > 0)
    rows = "".join(f"{i},{j}\n" for i, j in np.argwhere(links))
    (folder / "links.csv").write_text("earlier,later\n" + rows)
    t, x = (u + v) / np.sqrt(2), (u - v) / np.sqrt(2)
    held = [
        (letter, k)
        for letter, at in (("A", -0.45), ("B", 0.45))
        for k in np.flatnonzero(np.abs(t) + np.abs(x - at) < 0.4)
    ]
    (folder / "regions.csv").write_text(
        "region,element\n" + "".join(f"{letter},{k}\n" for letter, k in held)
    )
    wide = np.random.default_rng(1).random((N, 4))
    np.save(folder / "wide.npy", (wide[:, None] < wide).all(axis=2))
    return folder


def order(folder: Path, *arguments: str) -> int:
    given = [str(folder / a) if "." in a and a[0].isalpha() else a for a in arguments]
    return cli.main(["order", *given])


def test_the_table_says_what_is_assumed_and_what_was_found(
    folder: Path, capsys: pytest.CaptureFixture[str]
) -> None:
    assert order(folder, "all.npy", "--regions", "regions.csv") == cli.OK
    out = capsys.readouterr().out
    lines = out.splitlines()
    assert lines[:2] == ["Causal set all.npy", "Assumes a 1+1 sprinkling"]
    assert lines[2].startswith("400 elements, ")
    for words in (
        "ordering fraction",
        "modes above the threshold, n/(2 pi lambda)",
        "region A",
        "union, by support",
        "I(A:B), direct sum",
        "certificate: met",
        "one causal set: no error is known",
        "no reference slope: relations alone carry no coordinates",
    ):
        assert words in out
    assert "mismatch" not in out
    assert max(map(len, lines)) <= 100


def test_links_give_the_same_numbers(folder: Path, capsys: pytest.CaptureFixture[str]) -> None:
    documents = []
    for name, *more in (("all.npy",), ("links.csv", "--links"), ("links.csv", "--close")):
        assert order(folder, name, *more, "--regions", "regions.csv", "--json", "-") == cli.OK
        documents.append(json.loads(capsys.readouterr().out))
    for other in documents[1:]:
        assert other["relation_sha256"] == documents[0]["relation_sha256"]
        assert other["relations_added"] > 0
        for key in ("regions", "union", "mutual_information", "links", "relations"):
            assert other[key] == documents[0][key]


def test_links_that_are_not_closed_are_refused_with_the_way_out(
    folder: Path, capsys: pytest.CaptureFixture[str]
) -> None:
    assert order(folder, "links.csv") == cli.BAD_INPUT
    err = capsys.readouterr().err
    assert "but " in err
    assert "or have the relation closed" in err
    assert order(folder, "all.npy", "--links") == cli.BAD_INPUT
    assert "links alone: pairs with no element between" in capsys.readouterr().err


def test_a_mismatch_is_said_and_changes_how_it_ends(
    folder: Path, capsys: pytest.CaptureFixture[str]
) -> None:
    assert order(folder, "wide.npy") == cli.NOT_TRUSTED
    out = capsys.readouterr().out
    assert "does NOT match" in out
    assert "mismatch: the ordering fraction is 0.1" in out
    assert out.splitlines()[1] == "Assumes a 1+1 sprinkling"


def test_the_document_is_written_beside_the_table(
    folder: Path, tmp_path: Path, capsys: pytest.CaptureFixture[str]
) -> None:
    path = tmp_path / "found.json"
    status = cli.main(["order", str(folder / "all.npy"), "--alpha", "1.3", "--json", str(path)])
    assert status == cli.OK
    out = capsys.readouterr().out
    assert "alpha 1.3" in out
    document = json.loads(path.read_text())
    assert document["assumption"] == "Assumes a 1+1 sprinkling"
    assert document["alpha"] == 1.3
    assert f"{document['patch_modes']}/{2 * np.sqrt(N) / 1.3:.1f}" in out


def test_few_elements_are_told(
    folder: Path, tmp_path: Path, capsys: pytest.CaptureFixture[str]
) -> None:
    few = tmp_path / "few.csv"
    few.write_text("region,element\n" + "".join(f"A,{k}\n" for k in range(30)))
    cli.main(["order", str(folder / "all.npy"), "--regions", str(few)])
    assert "fewer than 80 elements in A: not in the scaling regime" in capsys.readouterr().out


@pytest.mark.parametrize(
    ("arguments", "words"),
    [
        (["gone.npy"], "No such file"),
        (["all.npy", "--alpha", "50"], "allowed is 0.05 to 20"),
        (["all.npy", "--regions", "gone.csv"], "No such file"),
        (["all.npy", "--json", "all.npy"], "another file than those that are read"),
        (["all.npy", "--alpha", "x"], "see lozenge order --help"),
    ],
)
def test_bad_input_is_refused_in_one_line(
    folder: Path, capsys: pytest.CaptureFixture[str], arguments: list[str], words: str
) -> None:
    before = (folder / "all.npy").read_bytes()
    assert order(folder, *arguments) == cli.BAD_INPUT
    caught = capsys.readouterr()
    assert words in caught.err
    assert caught.err.count("\n") == 1
    assert caught.out == ""
    assert (folder / "all.npy").read_bytes() == before
