"""Random and mutated files and edits: python3 tests/fuzz.py --count 100000 --seed 1.

Team files, world files, task edits and state files, as users, editors and crashes might
leave them: each gives what it should or an error, never a traceback, never more than a
second or 200 MB.
"""

from __future__ import annotations

import argparse
import json
import random
import resource
import sys
import time
import traceback
from collections import Counter
from collections.abc import Callable
from dataclasses import dataclass, field
from pathlib import Path
from tempfile import TemporaryDirectory

sys.path[:0] = [str(Path(__file__).parents[1])]

from allocator_node.allocator import Allocator  # noqa: E402
from allocator_node.files.document import FileError  # noqa: E402
from allocator_node.sim.world_file import parse_world  # noqa: E402
from allocator_node.team_file import merge_tasks, parse_team  # noqa: E402

CONFIG = Path(__file__).parents[1] / "config"

SECONDS, MEGABYTES = 1.0, 200.0
"""What one file may take."""

PIECES = (
    "- ", "\n", "\n  ", ": ", ", ", "&a ", "*a", "!!python/object/apply:os.system ", "<<: ",
    "1e999", "-1e-320", ".nan", ".inf", "null", "~", '"', "'", "{", "}", "[", "]", "\t", "\0",
    "\ufeff", "\u2028", "%YAML 3.0\n---\n", "...", "---\n", "|", ">-", "? ", "9" * 5000, "true",
    "0x" + "f" * 30, "-1", "0", "1e6", "99999999", "[" * 50, "{a: " * 50, "a" * 10_000, "é",
)  # fmt: skip

NUMBERS = (0, -1, 1e9, -1e9, 1e300, 1e-300, float("nan"), float("inf"), 2**70)


@dataclass
class Outcome:
    """What became of the inputs.

    Attributes:
        taken, refused: Inputs by kind that were valid, and that gave an error.
        failures: What must not happen.
        slowest: Longest time one took, s.
    """

    taken: Counter = field(default_factory=Counter)
    refused: Counter = field(default_factory=Counter)
    failures: list[str] = field(default_factory=list)
    slowest: float = 0.0


def mangled(text: str, chance: random.Random, words: list[str]) -> str:
    """Give a text with some spans cut, doubled, swapped or replaced."""
    for _ in range(chance.choice((1, 1, 2, 3, 8))):
        start = chance.randrange(len(text) + 1)
        end = min(len(text), start + chance.choice((0, 1, 3, 12, 200)))
        doubled = text[start:end] * 2
        piece = chance.choice((chance.choice(PIECES), chance.choice(words), doubled, ""))
        text = text[:start] + piece + text[end:]
    return text


def garbage(chance: random.Random, words: list[str]) -> str:
    """Give a text of random words, pieces and letters."""
    parts = (
        lambda: chance.choice(PIECES),
        lambda: chance.choice(words) + " ",
        lambda: "".join(chr(chance.randrange(1, 0x300)) for _ in range(5)),
    )
    return "".join(chance.choice(parts)() for _ in range(chance.randrange(1, 60)))


def shaken(value: object, chance: random.Random) -> object:
    """Give JSON data with some values replaced by others of any type."""
    if chance.random() < 0.02:
        return chance.choice(
            (None, True, "", "x", [], {}, [[]], {"a": {}}, "a" * 1000, *NUMBERS, value, [value])
        )
    if isinstance(value, dict):
        return {k: shaken(v, chance) for k, v in value.items() if chance.random() > 0.03}
    if isinstance(value, list):
        return [shaken(v, chance) for v in value] * chance.choice((1, 1, 1, 2))
    return value


class Fuzz:
    """Makes inputs and looks at what becomes of them."""

    def __init__(self, seed: int, directory: Path) -> None:
        self.chance = random.Random(seed)
        self.outcome = Outcome()
        self.state_path = directory / "state.json"
        teams = sorted(CONFIG.glob("*.yaml"))
        worlds = {p.name.removesuffix("_world.yaml"): p for p in teams if "_world" in p.name}
        self.pairs = [
            (path.read_text(), worlds[path.stem].read_text())
            for path in teams
            if path.stem in worlds
        ]
        self.text, self.world = self.pairs[0]
        self.team = parse_team(self.text)
        self.words = sorted(set((self.text + self.world).split()))
        self.memory = {
            "version": 1,
            "memory": {
                "efficacy": [
                    {"robot": robot, "task": task, "value": 0.4, "failures": 1, "barred": True}
                    for robot in self.team.robots
                    for task in self.team.tasks
                ],
                "finished": list(self.team.tasks)[:1],
                "assignment": dict(zip(self.team.robots, self.team.tasks, strict=False)),
                "troubles": {"rover_1: thermal camera": [2, "no picture"]},
                "charges": dict.fromkeys(self.team.robots, 0.5),
                "charging": list(self.team.robots)[:1],
                "places": {robot: [1.0, 2.0, 0.0, 0.5] for robot in self.team.robots},
            },
        }

    def one(self) -> None:
        """Try one input of a kind chosen at random."""
        kind = self.chance.choice(("team", "world", "edit", "state"))
        text, read = getattr(self, f"_{kind}")()
        began = time.perf_counter()
        try:
            read()
            self.outcome.taken[kind] += 1
        except (FileError, ValueError) as error:
            if isinstance(error, ValueError) and not str(error):
                self.outcome.failures.append(f"{kind}: an error without words: {text[:200]!r}")
            self.outcome.refused[kind] += 1
        except Exception:
            self.outcome.failures.append(f"{kind}: {text[:2000]!r}\n{traceback.format_exc()}")
        took = time.perf_counter() - began
        self.outcome.slowest = max(self.outcome.slowest, took)
        if took > SECONDS:
            self.outcome.failures.append(f"{kind}: {took:.1f} s for {text[:2000]!r}")

    def _spoilt(self, text: str) -> str:
        if self.chance.random() < 0.15:
            return garbage(self.chance, self.words)
        return mangled(text, self.chance, self.words)

    def _team(self) -> tuple[str, Callable[[], object]]:
        text = self._spoilt(self.chance.choice(self.pairs)[0])
        return text, lambda: parse_team(text)

    def _world(self) -> tuple[str, Callable[[], object]]:
        text = self._spoilt(self.world)
        return text, lambda: parse_world(text, self.team)

    def _edit(self) -> tuple[str, Callable[[], object]]:
        text = self._spoilt(self.text.partition("\ntasks:")[2])
        return text, lambda: merge_tasks(self.team, text)

    def _state(self) -> tuple[str, Callable[[], object]]:
        text = json.dumps(shaken(self.memory, self.chance))
        if self.chance.random() < 0.3:
            text = mangled(text, self.chance, self.words)
        return text, lambda: self._recalled(text)

    def _recalled(self, text: str) -> None:
        # What the node does with its state file, without the node.
        from allocator_node.ros.state_file import StateFile

        self.state_path.write_text(text, encoding="utf-8", errors="surrogatepass")
        keeper = StateFile(self.state_path)
        try:
            memory = keeper.load()
            allocator = Allocator(self.team)
            allocator.recall(memory)
            allocator.close()
        finally:
            keeper.close()


def run(count: int, seed: int) -> Outcome:
    """Try so many inputs."""
    with TemporaryDirectory() as directory:
        fuzz = Fuzz(seed, Path(directory))
        before = _resident_mb()
        for _ in range(count):
            fuzz.one()
        grown = _resident_mb() - before
        if grown > MEGABYTES:
            fuzz.outcome.failures.append(f"memory: {grown:.0f} MB more than before")
        return fuzz.outcome


def _resident_mb() -> float:
    peak = resource.getrusage(resource.RUSAGE_SELF).ru_maxrss
    return peak / (2**20 if sys.platform == "darwin" else 2**10)


def main() -> int:
    """Run the command; 0 where nothing failed."""
    parser = argparse.ArgumentParser(description=__doc__)
    parser.add_argument("--count", type=int, default=1000)
    parser.add_argument("--seed", type=int, default=0)
    options = parser.parse_args()
    outcome = run(options.count, options.seed)
    for failure in outcome.failures[:20]:
        print(failure)
    print(f"valid {dict(outcome.taken)}")
    print(f"refused {dict(outcome.refused)}")
    print(f"slowest {outcome.slowest:.3f} s, peak memory {_resident_mb():.0f} MB")
    print(f"failures {len(outcome.failures)}")
    return int(bool(outcome.failures))


if __name__ == "__main__":
    sys.exit(main())
