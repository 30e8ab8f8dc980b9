"""What the instruments of a measurement say, known before it is said.

Every placement on a balance has a mass of its own, a whole number of 10 mg
cells, so that one published mass names the placement it came from: the noise
of a reading stays below 1 mg. Nothing here is a record of a real soil.
"""

import array
import math
import random
from dataclasses import dataclass, field

CELL_UG = 10_000
STEADY_READINGS = 8
NOISE_G = 0.0003
RUN_OF_DROPS = 25
LINE_BYTES = 18


@dataclass(frozen=True)
class Cycle:
    """Lines of one placement: empty pan, loading, settling, steady, unloading."""

    empty: int
    loading: int
    settling: int
    steady: int
    unloading: int

    @property
    def lines(self):
        return self.empty + self.loading + self.settling + self.steady + self.unloading

    @property
    def steady_from(self):
        return self.empty + self.loading + self.settling

    @property
    def taken_at(self):
        """Index of the line that completes the agreeing readings."""
        return self.steady_from + STEADY_READINGS - 1

    @classmethod
    def parse(cls, text):
        parts = [int(p) for p in text.split(",")]
        if len(parts) != 5 or min(parts) < 0 or parts[3] < STEADY_READINGS:
            raise ValueError(f"'{text}' is no cycle: write five counts, the fourth at least {STEADY_READINGS}, such as 2,1,3,10,2")
        return cls(*parts)


# A mass every 18 lines is far more than a laboratory takes: a burden on
# publishing, on purpose. The long cycle is a balance that streams ten a second.
BUSY = Cycle(2, 1, 3, 10, 2)
CALM = Cycle(20, 5, 35, 130, 10)


class Masses:
    """Tare, wet and dry masses of as many containers as asked for, none twice.

    The three live in bands that do not touch; inside a band each container has
    another cell. So they differ by construction, whatever the count.
    """

    def __init__(self, containers, rng):
        self._n = max(1, containers)
        self._tare = list(range(self._n))
        self._wet = list(range(self._n))
        rng.shuffle(self._tare)
        rng.shuffle(self._wet)

    def of(self, container):
        """Cells of the tare, wet and dry mass, in the order they are weighed."""
        tare = 1500 + self._tare[container]
        dry = 1500 + self._n + 1000 + self._tare[container]
        wet = 1500 + 2 * (self._n + 1000) + self._wet[container]
        return tare, wet, dry


@dataclass
class Voice:
    """All lines of one port: bytes, where each starts, and when it is due."""

    name: str
    rate: float
    phase: float
    blob: bytearray = field(default_factory=bytearray)
    offsets: array.array = field(default_factory=lambda: array.array("Q", [0]))
    plateaus: list = field(default_factory=list)  # (cell, first steady line, line that completes it)
    drops: list = field(default_factory=list)  # the number of each line

    def say(self, line):
        self.blob += line
        self.offsets.append(len(self.blob))

    @property
    def count(self):
        return len(self.offsets) - 1

    def due(self, index):
        return self.phase + index / self.rate

    def due_by(self, now):
        """How many lines are due at `now`."""
        return min(self.count, max(0, math.floor((now - self.phase) * self.rate + 1e-9) + 1))

    def line(self, index):
        return bytes(self.blob[self.offsets[index] : self.offsets[index + 1]])


def render(mass_g, steady):
    sign = "-" if mass_g < 0 else "+"
    return f"{sign}{abs(mass_g):10.4f} g  {'S' if steady else 'U'}\r\n".encode("ascii")


def place(voice, cell, cycle, noise, rng):
    """One placement of `cell`: the lines and where its mass is to be taken."""
    mass, first = cell / 100, voice.count
    pick = noise.__getitem__
    size = len(noise)
    for _ in range(cycle.empty):
        voice.say(render(pick(rng.randrange(size)), True))
    for i in range(cycle.loading):
        voice.say(render(mass * (i + 0.4) / cycle.loading, False))
    for i in range(cycle.settling):
        swing = 0.7 * math.exp(-2.5 * i / cycle.settling) * math.sin(1.0 + 1.9 * i)
        voice.say(render(mass + swing + 0.02, False))
    for _ in range(cycle.steady):
        voice.say(render(mass + pick(rng.randrange(size)), True))
    for i in range(cycle.unloading):
        voice.say(render(mass * (1 - (i + 0.6) / cycle.unloading), False))
    voice.plateaus.append((cell, first + cycle.steady_from, first + cycle.taken_at))


def noise_table(rng):
    """Readings scatter as a normal law cut at three standard deviations."""
    bound = 3 * NOISE_G
    return [max(-bound, min(bound, rng.gauss(0, NOISE_G))) for _ in range(4096)]


def balances(count, rate, seconds, cycle, seed=1):
    """What `count` balances say, in whole cycles (one at least)."""
    rng = random.Random(seed)
    cycles = max(1, int(rate * seconds) // cycle.lines)
    containers = -(-cycles // 3)
    masses, noise = Masses(containers * count, rng), noise_table(rng)
    voices = []
    for b in range(count):
        voice = Voice(f"pan-{b:02d}", rate, (b + rng.random()) / (count * rate))
        for c in range(cycles):
            cell = masses.of(b * containers + c // 3)[c % 3]
            place(voice, cell, cycle, noise, rng)
        voices.append(voice)
    return voices


def counters(count, rate, seconds, run=RUN_OF_DROPS):
    """What `count` cup counters say: runs of drops, each from one."""
    voices = []
    for c in range(count):
        voice = Voice(f"cup-{c:02d}", rate, (c + 0.5) / (count * rate))
        for i in range(int(rate * seconds)):
            number = i % run + 1
            voice.say(b"DROP %d\r\n" % number)
            voice.drops.append(number)
        voices.append(voice)
    return voices
