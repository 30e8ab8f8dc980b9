"""Does the harness see what goes wrong? Each test breaks something and asks that it is told.

  tests/.venv/bin/python -m unittest discover -s tests/bench
"""

import contextlib
import json
import os
import signal
import sqlite3
import subprocess
import sys
import tempfile
import time
import tomllib
import unittest

sys.path.insert(0, os.path.dirname(os.path.abspath(__file__)))

import contenders  # noqa: E402
import corpus  # noqa: E402
import feed  # noqa: E402
import lines  # noqa: E402
import machine  # noqa: E402
import match  # noqa: E402
import replaying  # noqa: E402
import run  # noqa: E402
import scripted  # noqa: E402
import scripted_arrays  # noqa: E402
import sitting  # noqa: E402

FEED = run.feed_words(2, 40, 6, "2,1,3,10,2") + ["--drop-rate", 8]


class Faulty(contenders.Scripted):
    """scripted.py with a fault, put in before it serves."""

    def __init__(self, fault):
        super().__init__()
        self.fault = fault

    def prepare(self, place):
        python, script, *words = super().prepare(place)
        folder = os.path.dirname(script)
        return [python, "-c", f"import sys; sys.path.insert(0, {folder!r}); import scripted\n{self.fault}\nscripted.main()", *words]


SWALLOW_A_MESSAGE = """
told = scripted.Service.store_and_tell
def fewer(self):
    if len(self.messages) > 0 and not hasattr(self, "did"):
        self.did = self.messages.pop()
    told(self)
scripted.Service.store_and_tell = fewer
"""
SAY_IT_TWICE = """
told = scripted.Service.store_and_tell
def more(self):
    self.messages += self.messages[-1:]
    told(self)
scripted.Service.store_and_tell = more
"""
FORGET_A_LINE = """
told = scripted.Service.store_and_tell
def fewer(self):
    if len(self.heard) > 0 and not hasattr(self, "did"):
        self.did = self.heard.pop()
    told(self)
scripted.Service.store_and_tell = fewer
"""
TAKE_TOO_SOON = "scripted.READINGS = 3"
ANOTHER_MASS = """
heard = scripted.Balance.hear
def off(self, mass, steady):
    taken = heard(self, mass, steady)
    return taken and taken + 0.004
scripted.Balance.hear = off
"""
GIVE_UP = "raise SystemExit('no port today')"


class WholeWay(unittest.TestCase):
    """Broker, feeder, subscriber and a program."""

    def setUp(self):
        if sitting.mosquitto() is None:
            self.fail("mosquitto is not installed; these tests need the broker")

    def test_a_sound_program_is_complete_and_each_lost_record_is_missing(self):
        it = contenders.Scripted()
        with sitting.place() as here, sitting.broker(here), sitting._ear(it, here) as ear, sitting._feeder(here, *FEED) as feeder:
            with sitting.program(it, here):
                time.sleep(2)
                feeder.go()
                fed = feeder.result()
                drain, stored = sitting._drain(it, here, (0, None), fed["sent"], fed["end_ns"])
                time.sleep(1)
            ear.process.send_signal(signal.SIGTERM)
            ear.result()
            with open(here.file("stamps"), encoding="utf-8") as f:
                stamps = json.load(f)
            record = match.read_record(here.file("record"))
        self.assertIsNotNone(drain)
        self.assertEqual(stored, fed["sent"])
        whole = match.match(stamps, record, it.decode)
        self.assertTrue(match.complete(whole), whole)
        self.assertEqual(whole["mass_ms"]["n"], 2 * (240 // 18))
        self.assertEqual(whole["drop_ms"]["n"], 48)
        tried = {"mass": 0, "drop": 0}
        for i, entry in enumerate(record):
            meaning = it.decode(*entry[1:])
            if meaning is None:
                continue
            tried[meaning[0]] += 1
            less = match.match(stamps, record[:i] + record[i + 1 :], it.decode)
            self.assertFalse(match.complete(less))
            missing = {"mass": less["missing_masses"], "drop": less["missing_drops"]}
            self.assertEqual(missing, {"mass": 0, "drop": 0} | {meaning[0]: 1}, entry)
        self.assertEqual(tried, {"mass": 26, "drop": 48})

    def told_of(self, fault):
        return sitting.traffic(Faulty(fault), FEED, 2)

    def test_a_message_that_was_never_sent_is_missing(self):
        result = self.told_of(SWALLOW_A_MESSAGE)
        self.assertEqual(result["missing_masses"] + result["missing_drops"], 1, result)
        self.assertIn("missing", run.verdict(result))

    def test_a_message_that_was_sent_twice_is_doubled(self):
        result = self.told_of(SAY_IT_TWICE)
        self.assertGreater(result["doubled"], 0)
        self.assertTrue(run.verdict(result).startswith("fail"))

    def test_a_line_that_was_not_stored_is_told(self):
        result = self.told_of(FORGET_A_LINE)
        self.assertEqual(result["stored"], result["sent"] - 1)
        self.assertEqual(run.verdict(result), "fail: 1 lines not stored")

    def test_a_mass_taken_before_eight_readings_is_early(self):
        self.assertGreater(self.told_of(TAKE_TOO_SOON)["early"], 0)

    def test_a_wrong_mass_is_unknown_and_its_placement_missing(self):
        result = self.told_of(ANOTHER_MASS)
        self.assertEqual((result["unknown"], result["missing_masses"]), (26, 26))

    def test_a_program_that_ends_is_no_measurement(self):
        with self.assertRaisesRegex(sitting.Trouble, "no port today"):
            self.told_of(GIVE_UP)


class Feeding(unittest.TestCase):
    def port(self, folder, count):
        voice = lines.Voice("cup-00", 100.0, 0.0)
        for i in range(count):
            voice.say(b"DROP %d\r\n" % (i + 1))
            voice.drops.append(i + 1)
        port = feed.Port(folder, voice)
        self.addCleanup(os.close, port.master)
        self.addCleanup(os.close, port.slave)
        return port

    @staticmethod
    def read_all(port):
        os.set_blocking(port.slave, False)
        got = b""
        with contextlib.suppress(BlockingIOError):
            while more := os.read(port.slave, 65536):
                got += more
        return got

    def test_a_full_port_loses_whole_lines_and_says_which(self):
        with tempfile.TemporaryDirectory() as folder:
            port = self.port(folder, 20_000)
            port.write_until(15_000)
            got = self.read_all(port)
            port.write_until(15_001)
            time.sleep(0.05)
            got += self.read_all(port)
            port.write_until(20_000)
            got += self.read_all(port)
            port.finish_torn()
            got += self.read_all(port)
        self.assertGreater(port.lost_lines(), 0)
        whole = [int(line.removeprefix(b"DROP ")) for line in got.split(b"\r\n")[:-1]]
        self.assertEqual(len(whole), 20_000 - port.lost_lines())
        self.assertEqual(whole, [d["number"] for d in feed.stamps([port])["drops"]])
        self.assertEqual(feed.stamps([port])["spoilt"], port.lost_lines())

    def test_lines_are_what_the_instruments_print(self):
        self.assertEqual(lines.render(23.4571, True), b"+   23.4571 g  S\r\n")
        self.assertEqual(lines.render(-0.02, False), b"-    0.0200 g  U\r\n")
        (voice,) = lines.balances(1, 50, 20, lines.BUSY)
        self.assertEqual({voice.offsets[i + 1] - voice.offsets[i] for i in range(voice.count)}, {lines.LINE_BYTES})

    def test_no_mass_comes_twice(self):
        voices = lines.balances(8, 2000, 20, lines.CALM)
        cells = [cell for v in voices for cell, _, _ in v.plateaus]
        self.assertEqual(len(cells), 8 * 200)
        self.assertEqual(len(set(cells)), len(cells))

    def test_a_tick_writes_every_line_once_and_in_order(self):
        for tick in (0, 0.003):
            with tempfile.TemporaryDirectory() as folder:
                port = self.port(folder, 40)
                _, _, late = feed.play([port], tick)
                self.assertEqual(self.read_all(port), bytes(port.voice.blob))
                self.assertGreater(len(late), 0)
                sent = [port.sent_at(i) for i in range(40)]
                self.assertEqual(sent, sorted(sent))
                self.assertGreater(sent[-1] - sent[0], 380e6)


class Matching(unittest.TestCase):
    """The account itself, with times chosen by hand."""

    def test_the_same_number_again_belongs_to_the_later_run(self):
        stamps = {"plateaus": [], "spoilt": 0, "drops": [{"port": "c", "number": 1, "sent": s} for s in (0, 10_000_000)]}
        decode = lambda topic, payload: ("drop", topic, int(payload))
        late = match.match(stamps, [(12_000_000, "c", "1")], decode)
        self.assertEqual((late["missing_drops"], late["drop_ms"]["max"]), (1, 2.0))
        both = match.match(stamps, [(1_000_000, "c", "1"), (12_000_000, "c", "1")], decode)
        self.assertTrue(match.complete(both))
        twice = match.match(stamps, [(11_000_000, "c", "1"), (12_000_000, "c", "1")], decode)
        self.assertEqual((twice["doubled"], twice["missing_drops"]), (1, 1))
        elsewhere = match.match(stamps, [(12_000_000, "other", "1")], decode)
        self.assertEqual((elsewhere["unknown"], elsewhere["missing_drops"]), (1, 2))

    def test_percentiles_are_nearest_rank(self):
        # The p-th of the numbers 1 to 100 by nearest rank is p (the definition).
        self.assertEqual(machine.percentiles(range(1, 101)), {"n": 100, "p50": 50, "p95": 95, "p99": 99, "max": 100})
        self.assertEqual(machine.percentiles([7])["p99"], 7)
        self.assertIsNone(machine.percentiles([]))

    def test_cpu_of_a_child_is_counted(self):
        busy = "import time\nt = time.process_time()\nwhile time.process_time() - t < 0.5: pass\nprint(1, flush=True)\ninput()"
        shell = subprocess.Popen(["sh", "-c", '"$0" -c "$1"; :', sys.executable, busy], stdin=subprocess.PIPE, stdout=subprocess.PIPE, text=True)
        shell.stdout.readline()
        used = machine.used(shell.pid)
        shell.communicate("\n")
        self.assertGreaterEqual(used["cpu_s"], 0.45)
        self.assertGreater(used["rss_peak_mib"], 5)


class Service(unittest.TestCase):
    """What the harness takes tarecup's words for."""

    def test_facts_and_live_messages_are_told_apart(self):
        decode, root = contenders.Tarecup.decode, contenders.Tarecup.ROOT
        weighed = {"v": 1, "seq": 9, "kind": "weighed", "who": None, "fact": {"mass_ug": 23457100, "bench": "b"}}
        counted = {"v": 1, "seq": 10, "kind": "counted", "who": None, "fact": {"drops": 25}}
        self.assertEqual(decode(f"{root}/fact", json.dumps(weighed)), ("mass", 23457100))
        self.assertIsNone(decode(f"{root}/fact", json.dumps(counted)))
        self.assertEqual(decode(f"{root}/live/cup-00", '{"drops":17,"rate_per_s":2.0}'), ("drop", "cup-00", 17))
        self.assertIsNone(decode(f"{root}/live/pan-00", '{"mass_g":23.4571}'))

    def expect_settings(self, text, folder, names):
        got = tomllib.loads(text)
        kinds = {"pan": "balance", "bal": "balance", "cup": "counter", "dro": "counter"}
        self.assertEqual([(i["name"], i["kind"], i["port"]) for i in got["instrument"]],
                         [(n, kinds[n[:3]], f"{folder}/{n}") for n in names])
        benches = [b["name"] for b in got["bench"]]
        self.assertEqual(len(set(benches)), len(benches))
        for i in got["instrument"]:
            self.assertIn(i["bench"], benches)
            if i["kind"] == "balance":
                rule = (i["steady_readings"], i["steady_span_g"], i["load_from_g"], i["change_from_g"])
                self.assertEqual(rule, (scripted.READINGS, scripted.SPAN_G, scripted.LOAD_FROM_G, scripted.CHANGE_FROM_G))
        self.assertEqual(got["mqtt"]["url"], "mqtt://127.0.0.1:1999")

    def test_settings_name_every_port_with_the_same_rule(self):
        names = ["cup-00", "pan-00", "pan-01"]
        self.expect_settings(contenders.settings(names, "/ports", "127.0.0.1:1999"), "/ports", names)

    def test_the_wrapper_writes_the_same_settings_and_links_the_ledger(self):
        with tempfile.TemporaryDirectory() as folder:
            ports, state, link = (os.path.join(folder, n) for n in ("ports", "state", "raw.db"))
            os.mkdir(ports)
            names = ["bal00", "bal01", "drop00"]
            for name in names:
                os.symlink("/dev/null", os.path.join(ports, name))
            script = os.path.join(sitting.HERE, "tarecup.sh")
            said = subprocess.run([script, "/bin/echo", ports, state, "127.0.0.1:1999", link, "--more"], capture_output=True, text=True, check=True).stdout
            self.assertEqual(said, f"run --config {state}/bench.toml --state {state} --more\n")
            with open(os.path.join(state, "bench.toml"), encoding="utf-8") as f:
                self.expect_settings(f.read(), ports, names)
            with contextlib.closing(sqlite3.connect(os.path.join(state, "ledger.sqlite"))) as db:
                db.execute("CREATE TABLE input(no INTEGER)")
            self.assertEqual(contenders._query(link, "SELECT count(*) FROM input"), (0,))

    def test_only_lines_are_counted_and_each_once(self):
        with sitting.place() as here:
            it = contenders.Tarecup("tarecup")
            self.assertEqual(it.stored(here, (0, None)), (0, None))
            os.mkdir(here.file("state"))
            with contextlib.closing(sqlite3.connect(here.file("state/ledger.sqlite"), isolation_level=None)) as db:
                db.execute("CREATE TABLE input(no INTEGER PRIMARY KEY, kind TEXT)")
                put = lambda *kinds: db.executemany("INSERT INTO input(kind) VALUES(?)", [(k,) for k in kinds])
                put("settings", "port", "line", "reject", "line")
                first = it.stored(here, (0, None))
                put("timer", "line")
                second = it.stored(here, first)
                third = it.stored(here, second)
            self.assertEqual((first, second, third), ((3, 5), (4, 7), (4, 7)))


class Replaying(unittest.TestCase):
    def setUp(self):
        self.folder = self.enterContext(tempfile.TemporaryDirectory())
        self.path = os.path.join(self.folder, "corpus.sqlite")
        self.count, self.placements = corpus.write(self.path, 20_000, self.path + ".tsv")

    def out(self, masses):
        path = os.path.join(self.folder, "out")
        with open(path, "w", encoding="ascii") as f:
            f.writelines(f"{port}\t{round(g * 1e6)}\n" for port, g in masses)
        return path

    def test_both_ways_take_every_mass(self):
        self.assertEqual(self.count, 20_000)
        count, masses, limits = scripted.replay(self.path)
        self.assertEqual((count, len(masses)), (20_000, self.placements))
        self.assertGreater(limits, 0)
        self.assertEqual(scripted_arrays.replay(self.path), (count, masses, limits))
        self.assertEqual(replaying.compare(self.path, self.out(masses)), 0)

    def test_a_wrong_a_missing_and_an_invented_mass_are_told(self):
        _, masses, _ = scripted.replay(self.path)
        port, g = masses[5]
        last = max(i for i, m in enumerate(masses) if m[0] == port)
        self.assertEqual(replaying.compare(self.path, self.out([*masses[:5], (port, g + 0.01), *masses[6:]])), 1)
        self.assertEqual(replaying.compare(self.path, self.out(masses[:last] + masses[last + 1 :])), 1)
        self.assertEqual(replaying.compare(self.path, self.out([*masses, (port, 99.0)])), 1)
        self.assertEqual(replaying.compare(self.path, self.out([])), self.placements)

    def test_the_text_holds_the_same_lines(self):
        with open(self.path + ".tsv", encoding="ascii") as f:
            text = [line.rstrip("\n").split("\t") for line in f]
        with contextlib.closing(sqlite3.connect(self.path)) as db:
            rows = [[str(at), port, line.decode()] for at, port, line in db.execute("SELECT at_ns, port, line FROM heard ORDER BY no")]
        self.assertEqual(text, rows)

    def test_a_replay_that_fails_is_told(self):
        with self.assertRaisesRegex(replaying.Trouble, "ended with 1"):
            replaying.once("false {corpus}", self.path)
        with self.assertRaisesRegex(replaying.Trouble, "cannot be started"):
            replaying.once("/no/such/program {corpus}", self.path)


class Rules(unittest.TestCase):
    def test_a_line_over_log_drops_is_found_again(self):
        # The liquid limit is the water content at 25 drops on the flow line (ASTM D4318); here the line is given.
        trials = [(n, 46 - 11 * (scripted.math.log10(n) - scripted.math.log10(25))) for n in (33, 24, 17)]
        limit, slope = scripted.liquid_limit(trials)
        self.assertAlmostEqual(limit, 46, 9)
        self.assertAlmostEqual(slope, -11, 9)
        self.assertIsNone(scripted.liquid_limit([(25, 40), (25, 41), (25, 42)]))


if __name__ == "__main__":
    unittest.main()
