"""A record that does not arrive whole from its worker is not served: it is solved again."""

from __future__ import annotations

from collections.abc import Callable
from pathlib import Path

import grpc
import numpy as np
import pytest

import modewright
from modewright.record import Record
from modewright_service.core.problem import Constant, Dirichlet, Layer, Problem
from modewright_service.core.solve import solve
from tests.process.harness import running, solve_request

# ---- what workers run here: the real solver, whose first record of each process is then spoilt ----


class Spoilt:
    """A record whose file is `spoil` of what it should be."""

    done = False

    def __init__(self, record: Record, spoil: Callable[[bytes], bytes]) -> None:
        self._record = record
        self._spoil = spoil

    def to_bytes(self) -> bytes:
        data = self._record.to_bytes()
        if Spoilt.done:
            return data
        Spoilt.done = True
        return self._spoil(data)


def _flip(data: bytes) -> bytes:
    middle = len(data) // 2
    return data[:middle] + bytes([data[middle] ^ 1]) + data[middle + 1 :]


def _another(_: bytes) -> bytes:
    """A whole and valid record, but of another problem."""
    layer = Layer("only", 0.0, 1.0, w=Constant(77.0))
    return solve(Problem((layer,), Dirichlet(), Dirichlet()), 8, 1e-9).to_bytes()


def flipped(problem, count, rtol, *, poll):
    return Spoilt(solve(problem, count, rtol, poll=poll), _flip)


def cut_short(problem, count, rtol, *, poll):
    return Spoilt(solve(problem, count, rtol, poll=poll), lambda data: data[:-1000])


def empty(problem, count, rtol, *, poll):
    return Spoilt(solve(problem, count, rtol, poll=poll), lambda data: b"")


def another(problem, count, rtol, *, poll):
    return Spoilt(solve(problem, count, rtol, poll=poll), _another)


@pytest.mark.parametrize("entry", ["flipped", "cut_short", "empty", "another"])
def test_a_damaged_record_is_thrown_away_and_solved_again(entry: str, tmp_path: Path) -> None:
    with running(tmp_path, entry=f"{__name__}:{entry}") as live:
        with pytest.raises(grpc.RpcError) as caught:
            live.stub.Solve(solve_request())
        assert caught.value.code() is grpc.StatusCode.UNAVAILABLE
        assert "damaged" in caught.value.details()
        assert len(live.service.cache) == 0
        assert live.service.counters.records_damaged == 1
        assert list((tmp_path / "spool").glob("front-*/*.record")) == []
        answer = live.stub.Solve(solve_request())
        assert not answer.answered_from_cache
        # lambda_n = ((n + 1) pi)^2: elementary.
        np.testing.assert_allclose(answer.eigenvalues, (np.arange(1, 9) * np.pi) ** 2, rtol=1e-11)
        assert live.service.counters.worker_restarts == 0


def test_the_client_does_not_notice(tmp_path: Path) -> None:
    document = {
        "layers": [{"start": 0.0, "end": 1.0}],
        "left": {"kind": "dirichlet"},
        "right": {"kind": "dirichlet"},
    }
    with running(tmp_path, entry=f"{__name__}:flipped") as live, modewright.connect(live.address) as service:
        basis = service.solve(modewright.Problem.from_dict(document), modes=3)
        np.testing.assert_allclose(basis.eigenvalues, (np.arange(1, 4) * np.pi) ** 2, rtol=1e-11)
        assert live.service.counters.records_damaged == 1
