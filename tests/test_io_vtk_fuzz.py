"""Random damage: every file is read or refused by an error of ours; nothing else happens."""

from __future__ import annotations

import random
from pathlib import Path

import pytest

from child_reader import read_in_child
from test_io_vtk_hostile import KINDS, write_all

ROUNDS = 60


@pytest.fixture(scope="module")
def sound(tmp_path_factory: pytest.TempPathFactory) -> dict[str, Path]:
    return write_all(tmp_path_factory.mktemp("sound"))


def damaged(data: bytes, rng: random.Random) -> bytes:
    """Change a few bytes, flip a bit, or cut, double or drop a stretch; half of it in the part with the sizes."""
    made = bytearray(data)
    end = len(data) if rng.random() < 0.5 else min(len(data), 3000)
    at = rng.randrange(end)
    match rng.randrange(6):
        case 0:
            return data[:at]
        case 1:
            made[at] ^= 1 << rng.randrange(8)
        case 2:
            for _ in range(rng.choice((1, 3, 8))):
                made[rng.randrange(end)] = rng.choice((0, 255, 45, 46, 57, 60, rng.randrange(256)))
        case 3:
            del made[at : at + rng.randrange(1, 60)]
        case 4:
            made[at:at] = made[at : at + rng.randrange(1, 60)]
        case _:
            digits = [k for k in range(end) if 48 <= data[k] <= 57]
            made[rng.choice(digits or [0])] = rng.choice(b"0123456789")
    return bytes(made)


# Common practice, no source.
@pytest.mark.parametrize("kind", KINDS)
def test_random_damage(kind: str, sound: dict[str, Path], tmp_path: Path) -> None:
    rng = random.Random(f"seed of {kind}")
    data = sound[kind].read_bytes()
    paths = []
    for k in range(ROUNDS):
        paths.append(tmp_path / f"{k}{sound[kind].suffix}")
        paths[-1].write_bytes(damaged(data, rng))
    outcomes = read_in_child(paths)
    assert len(outcomes) == ROUNDS
    assert {kind for kind, _ in outcomes.values()} <= {"read", "InputError"}, outcomes
