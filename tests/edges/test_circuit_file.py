"""Files of learned circuits: what is in force, and every way a file can be wrong is one sentence."""

from dataclasses import replace
from datetime import UTC, datetime

import numpy as np
import pytest

from idlerwatch.core.converter.known import KnownCircuit
from idlerwatch.edges.circuit_file import accept, folder_of, in_force, read_circuit, save, versions

NAMES = ("g0", "b0", "can_0")


def known(learned_at="2026-11-30T10:00:00Z"):
    return KnownCircuit(
        NAMES, np.array([7.0, 12.0, -0.0123456789]), np.diag([0.1, 0.2, 1e-5]), learned_at, "one", "two", 12, 480,
        216.0, 253.0, 0.41, 1.2e4, has_converged=True,
    )  # fmt: skip


def test_newest_learned_is_not_in_force_until_it_is_accepted(tmp_path):
    assert in_force(tmp_path) == (None, in_force(tmp_path)[1])
    assert "no circuit was learned and accepted yet" in in_force(tmp_path)[1]
    save(tmp_path, known())
    assert in_force(tmp_path)[0] is None
    (version,) = versions(tmp_path)
    accept(version, "A. Wright", datetime(2026, 12, 1, tzinfo=UTC))
    save(tmp_path, known("2026-12-05T10:00:00Z"))
    found, sentence = in_force(tmp_path)
    assert sentence == ""
    assert (found.learned_at, found.accepted_by, found.accepted_at) == (
        "2026-11-30T10:00:00Z", "A. Wright", "2026-12-01T00:00:00Z",
    )  # fmt: skip


def test_the_one_accepted_last_is_in_force_even_an_older_one(tmp_path):
    for stamp in ("2026-11-01T10:00:00Z", "2026-11-30T10:00:00Z"):
        save(tmp_path, known(stamp))
    old, new = versions(tmp_path)
    accept(new, "one", datetime(2026, 12, 1, tzinfo=UTC))
    accept(old, "two", datetime(2026, 12, 2, tzinfo=UTC))
    assert in_force(tmp_path)[0].learned_at == "2026-11-01T10:00:00Z"
    assert len(versions(tmp_path)) == 2


@pytest.mark.parametrize(
    ("spoil", "sentence"),
    [
        (lambda text: text[: len(text) // 2], "damaged"),
        (lambda text: text.replace("version = 1", "version = 9"), "version is 9, must be 1"),
        (lambda text: text.replace("states = 12", 'states = "many"'), "states is 'many', must be a whole number"),
        (lambda text: text.replace('name = "b0", value = 12.0', 'name = "b0", value = "x"'), "parameter 2 is"),
        (lambda text: text.replace("[0.1, 0.0, 0.0]", "[0.1, 0.0]"), "covariance has 3 rows, must be 3 by 3 numbers"),
        (lambda text: text.replace("[0.1, 0.0, 0.0]", "[-0.1, 0.0, 0.0]"), "covariance is no covariance"),
        (lambda _: "\x00\xff", "damaged"),
        (lambda _: "", "version is None, must be a whole number"),
    ],
)
def test_damaged_file_is_one_sentence_and_the_plate_serves(tmp_path, spoil, sentence):
    path = save(tmp_path, known())
    accept(versions(tmp_path)[0], "A. Wright")
    path.write_text(spoil(path.read_text()), encoding="latin-1")
    found, said = in_force(tmp_path)
    assert found is None
    assert sentence in said
    assert said.endswith("the plate's values serve")
    assert "\n" not in said


def test_damaged_newest_is_not_passed_over_for_an_older_one(tmp_path):
    save(tmp_path, known("2026-11-01T10:00:00Z"))
    accept(versions(tmp_path)[0], "one")
    path = save(tmp_path, known("2026-11-30T10:00:00Z"))
    path.write_text("version = 1")
    found, said = in_force(tmp_path)
    assert found is None
    assert str(path) in said


def test_accepting_what_cannot_be_read_is_refused(tmp_path):
    path = folder_of(tmp_path) / "20261130T100000Z.toml"
    path.parent.mkdir()
    path.write_text("no = toml = at all")
    with pytest.raises(ValueError, match="damaged"):
        accept(read_circuit(path), "me")


def test_what_is_written_is_read_again_to_the_last_digit(tmp_path):
    given = replace(known(), not_separable=("C1", "C2"))
    read = read_circuit(save(tmp_path, given)).known
    assert read.names == given.names
    assert np.array_equal(read.parameters, given.parameters)
    assert np.array_equal(read.covariance, given.covariance)
    assert read.not_separable == ("C1", "C2")


def test_a_name_with_quotes_breaks_no_file(tmp_path):
    save(tmp_path, known())
    taken = accept(versions(tmp_path)[0], 'A "Chips" Wright\\\n')
    assert taken.accepted_by == 'A "Chips" Wright\\\n'
    assert in_force(tmp_path)[0].accepted_by == "A Chips Wright"
