"""A transmitter of symbols written from the words and tables of manual.md alone.

It shares no code with the package: the standard library, NumPy for nothing but the result, and the
manual's own tables, which it reads from the page. Slow and plain on purpose.
"""

from __future__ import annotations

import cmath
import itertools
import math
import tomllib
from pathlib import Path

import numpy as np
from plain_schemes import PlainScheme


def table_rows(manual, *head):
    """Rows (lists of cells) of the manual's table whose head begins with the given cells."""
    lines = manual.splitlines()
    for i, line in enumerate(lines):
        if cells(line)[: len(head)] == list(head) and line.startswith("|"):
            rows = itertools.takewhile(lambda row: row.startswith("|"), lines[i + 2 :])
            return [cells(row) for row in rows]
    raise AssertionError(f"no table with head {head} in the manual")


def cells(line):
    return [c.strip() for c in line.strip().strip("|").split("|")]


def numbers(text):
    return [int(x) for x in text.split(",")]


class PlainTransmitter:
    def __init__(self, text, manual, folder=None):
        self.file = tomllib.loads(text)
        self.folder = folder
        self.antennas = self.file["air"]["antennas"]
        self.read_tables(manual)
        self.build_words()

    def read_tables(self, manual):
        self.default_taps = {}
        for row in table_rows(manual, "n", "taps", "n", "taps"):
            for order, taps in zip(row[0::2], row[1::2], strict=True):
                self.default_taps[int(order)] = numbers(taps)
        self.gold_pairs = {
            int(n): (numbers(x), numbers(y))
            for n, x, y in table_rows(manual, "n", "taps of x", "taps of y")
        }
        self.prbs_table = {
            name: (int(n), numbers(taps), inverted == "yes", "zero-suppressed" in source)
            for name, n, taps, inverted, source in table_rows(manual, "name", "n", "taps")
        }
        self.crc_table = {row[0]: row[1:7] for row in table_rows(manual, "name", "width", "poly")}
        self.levels = {}
        for name, rule, factor in table_rows(manual, "name", "bits of one axis -> I or Q"):
            pairs = [p.split("->") for p in rule.split(";")[0].split(",")]
            table = {bits.strip(): int(level) for bits, level in pairs}
            root = 1.0 if factor == "1" else 1 / math.sqrt(int(factor.removeprefix("1/sqrt ")))
            self.levels[name] = (table, root)

    # Chapter 4

    def symbol_of_label(self, label):
        table = self.file["modulation"].get("constellation")
        if table is None:
            return 1.0
        if "points" in table:
            points = [as_complex(p) for p in table["points"]]
            scale = 1.0
            if table["normalise"]:
                scale = 1 / math.sqrt(sum(abs(p) ** 2 for p in points) / len(points))
            return points[table["labels"].index("".join(map(str, label)))] * scale
        name = table["name"]
        if name == "8PSK":
            places = ["000", "001", "011", "010", "110", "111", "101", "100"]
            return cmath.exp(1j * math.pi / 4 * places.index("".join(map(str, label))))
        if table.get("labelling", "3gpp") == "802.11":
            levels, root = self.levels[name]
            if name == "BPSK":
                return levels[str(label[0])] * root
            half = len(label) // 2
            i, q = ("".join(map(str, part)) for part in (label[:half], label[half:]))
            return complex(levels[i], levels[q]) * root
        return symbol_3gpp(name, label)

    def build_words(self):
        modulation = self.file["modulation"]
        table = modulation.get("constellation")
        points = 1
        if table is not None:
            sizes = {"BPSK": 2, "QPSK": 4, "8PSK": 8, "16QAM": 16, "64QAM": 64, "256QAM": 256}
            points = len(table["points"]) if "points" in table else sizes[table["name"]]
        self.scheme = PlainScheme(modulation, self.antennas, self.symbol_of_label, points)
        self.word_bits = self.scheme.bits

    # Chapter 6

    def sequence(self, table, extra_shift=0):
        kind = table["type"]
        if kind == "m-sequence":
            n = table["order"]
            taps = table.get("taps", self.default_taps[n])
            base = signs(register(n, taps, table.get("state", 2**n - 1), 2**n - 1))
        elif kind == "zadoff-chu":
            size, root = table["length"], table["root"]
            e = size % 2
            base = [cmath.exp(-1j * math.pi * root * i * (i + e) / size) for i in range(size)]
        elif kind == "gold":
            n, index = table["order"], table["index"]
            x, y = (register(n, taps, 2**n - 1, 2**n - 1) for taps in self.gold_pairs[n])
            if index >= 2:
                x = [b ^ y[(k + index - 2) % len(y)] for k, b in enumerate(x)]
            base = signs(y if index == 1 else x)
        elif kind == "gold-3gpp":
            base = signs(gold_3gpp(table["c_init"], table["length"]))
        else:
            base = [as_complex(s) for s in table["symbols"]]
        shift = table.get("cyclic_shift", 0) + extra_shift
        return [base[(m + shift) % len(base)] for m in range(table.get("length", len(base)))]

    def known_section(self, s):
        chosen = s.get("antennas", list(range(self.antennas)))
        repeat = s.get("repeat", 1)
        g = 10 ** (s.get("power_db", 0) / 20)
        rows = []
        if s.get("send") == "in-turn":
            u = self.sequence(s["sequence"])
            for _ in range(repeat):
                for a in chosen:
                    for symbol in u:
                        rows.append(self.row({a: g * symbol}))
            return rows
        shifts = s.get("antenna_shift", [0] * len(chosen))
        each = [self.sequence(s["sequence"], d) for d in shifts]
        for r in range(repeat):
            for m in range(len(each[0])):
                sent = {}
                for i, a in enumerate(chosen):
                    weight = as_complex(s["cover"][i][r]) if "cover" in s else 1
                    sent[a] = g * weight * each[i][m]
                rows.append(self.row(sent))
        return rows

    def row(self, sent):
        return [complex(sent.get(a, 0)) for a in range(self.antennas)]

    def periods(self):
        """For each period of the frame ("known", row) or ("word", g); in differential form a word
        and ("reference", g) take Nt periods."""
        result = []
        for s in self.file["frame"]["section"]:
            if s["kind"] == "silence":
                result += [("known", self.row({}))] * s["symbols"]
            elif s["kind"] == "payload":
                g = 10 ** (s.get("power_db", 0) / 20)
                section = [("word", g)] * s["symbols"]
                if "blocks" in s:
                    count = s["symbols"] // s["blocks"]["length"]
                    section = [("block", (g, s["blocks"], self.antennas))] * count
                if self.scheme.differential:
                    blocks = s["symbols"] // self.antennas - 1
                    section = [("reference", g)] + [("word", g)] * blocks
                if "known" in s:
                    k = s["known"]
                    u = self.sequence(k["sequence"])
                    chosen = k.get("antennas", list(range(self.antennas)))
                    places = range(k.get("first", 0), s["symbols"], k["every"])
                    for i, place in enumerate(places):
                        sent = {chosen[i % len(chosen)]: g * u[i % len(u)]}
                        section[place] = ("known", self.row(sent))
                result += section
            else:
                result += [("known", row) for row in self.known_section(s)]
        return result

    # Chapters 7 and 8

    def plain_bits(self, n, data):
        total = self.word_bits * sum(words_of(*period) for period in self.periods())
        fields = self.file["payload"]["field"]
        widths = [self.field_width(f) for f in fields]
        rest = total - sum(w for w in widths if w is not None)
        parts = []
        data = list(data)
        for f, width in zip(fields, widths, strict=True):
            width = rest if width is None else width
            if f["type"] == "data":
                parts.append(data[:width])
                data = data[width:]
            else:
                parts.append(self.field_bits(f, n, width, parts))
        bits = [b for part in parts for b in part]
        return bits + [0] * (total - len(bits))

    def field_width(self, f):
        if f["type"] == "fixed":
            return len(f["value"])
        if f["type"] == "crc":
            return int(self.crc_table[f["name"]][0]) if "name" in f else f["width"]
        return None if f["bits"] == "rest" else f["bits"]

    def field_bits(self, f, n, width, before):
        if f["type"] == "counter":
            value = (f.get("start", 0) + n) % 2**width
            bits = [(value >> i) & 1 for i in range(width)]
            return bits if f.get("order") == "lsb-first" else bits[::-1]
        if f["type"] == "fixed":
            return [int(c) for c in f["value"]]
        if f["type"] == "crc":
            covers = f.get("covers", "all-before")
            chosen = range(len(before)) if covers == "all-before" else covers
            return self.check_bits(f, [b for i in chosen for b in before[i]])
        first = n * width if f.get("continuation") == "running" else 0
        if f["type"] == "file":
            content = (self.folder / f["file"]).read_bytes()
            bits = [(byte >> i) & 1 for byte in content for i in range(7, -1, -1)]
            return [bits[(first + k) % len(bits)] for k in range(width)]
        order, taps, inverted, suppressed = self.prbs_table[f["name"]]
        inverted = f.get("inverted", inverted)
        a = register(order, taps, 2**order - 1, first + width + 15)
        if suppressed:
            a = [1 if not any(a[k + 1 : k + 15]) else a[k] for k in range(first + width)]
        return [a[k] ^ inverted for k in range(first, first + width)]

    def check_bits(self, f, bits):
        if "name" in f:
            width, poly, init, refin, refout, xorout = self.crc_table[f["name"]]
            width, poly, init, xorout = (int(x, 0) for x in (width, poly, init, xorout))
            refin, refout = refin == "true", refout == "true"
        else:
            width, poly, init, xorout = (f[k] for k in ("width", "poly", "init", "xorout"))
            refin, refout = f["refin"], f["refout"]
        if refin:
            bits = [b for i in range(0, len(bits), 8) for b in bits[i : i + 8][::-1]]
        reg = init
        for d in bits:
            top = (reg >> (width - 1)) ^ d
            reg = (reg << 1) & (2**width - 1)
            if top:
                reg ^= poly
        out = [(reg >> i) & 1 for i in range(width - 1, -1, -1)]
        if refout:
            out = out[::-1]
        return [b ^ ((xorout >> (width - 1 - i)) & 1) for i, b in enumerate(out)]

    def sent_bits(self, n, data=()):
        p = self.plain_bits(n, data)
        table = self.file["payload"].get("scrambler")
        if table is None:
            return p
        if table["type"] == "gold-3gpp":
            return [a ^ b for a, b in zip(p, gold_3gpp(table["c_init"], len(p)), strict=True)]
        start = table["seed"] if table["type"] == "additive" else table.get("state", 0)
        past = {-i: (start >> (i - 1)) & 1 for i in range(1, max(table["taps"]) + 1)}
        sent = []
        for k, bit in enumerate(p):
            fed = 0
            for t in table["taps"]:
                fed ^= past[k - t]
            sent.append(bit ^ fed)
            past[k] = fed if table["type"] == "additive" else sent[-1]
        return sent

    def block(self, what, bits):
        amplitude, table, antennas = what
        form, length, guard = table["form"], table["length"], table["guard"]
        used = used_subcarriers(table)
        words = []
        for _ in range(words_of("block", what)):
            word, bits = bits[: self.word_bits], bits[self.word_bits :]
            words += [[amplitude * x for x in row] for row in self.scheme.vectors(word)]
        body = body_of(words, form, length, used)
        if form == "zero-padding":
            return body + [[0j] * antennas] * guard, bits
        return body[length - guard :] + body, bits

    def frame(self, n, data=()):
        """Symbols of every period and antenna: complex, shape (K, Nt)."""
        bits = self.sent_bits(n, data) if "payload" in self.file else []
        rows = []
        for kind, what in self.periods():
            if kind == "known":
                rows.append(what)
            elif kind == "block":
                made, bits = self.block(what, bits)
                rows += made
            elif kind == "reference":
                rows += [[what * x for x in row] for row in self.scheme.start()]
            else:
                word, bits = bits[: self.word_bits], bits[self.word_bits :]
                rows += [[what * x for x in row] for row in self.scheme.vectors(word)]
        assert not bits
        return np.array(rows)


def used_subcarriers(table):
    return table.get("subcarriers", list(range(1, table["length"])))


def words_of(kind, what):
    if kind == "block":
        multicarrier = what[1]["form"] == "multicarrier"
        return len(used_subcarriers(what[1])) if multicarrier else what[1]["length"]
    return int(kind == "word")


def body_of(words, form, length, subcarriers):
    if form != "multicarrier":
        return words
    antennas = len(words[0])
    spectrum = [[0j] * antennas for _ in range(length)]
    for f, vector in zip(subcarriers, words, strict=True):
        spectrum[f] = vector
    turns = [cmath.exp(2j * math.pi * k / length) for k in range(length)]
    return [
        [
            sum(spectrum[f][a] * turns[f * n % length] for f in range(length)) / math.sqrt(length)
            for a in range(antennas)
        ]
        for n in range(length)
    ]


def as_complex(value):
    return complex(*value) if isinstance(value, list) else complex(value)


def signs(bits):
    return [1.0 - 2.0 * b for b in bits]


def register(n, taps, state, count):
    a = [(state >> (n - 1 - k)) & 1 for k in range(n)]
    for k in range(n, count):
        bit = 0
        for t in taps:
            bit ^= a[k - t]
        a.append(bit)
    return a[:count]


def gold_3gpp(c_init, count):
    x1 = [1] + [0] * 30
    x2 = [(c_init >> i) & 1 for i in range(31)]
    for i in range(1600 + count):
        x1.append(x1[i + 3] ^ x1[i])
        x2.append(x2[i + 3] ^ x2[i + 2] ^ x2[i + 1] ^ x2[i])
    return [x1[i + 1600] ^ x2[i + 1600] for i in range(count)]


def symbol_3gpp(name, b):
    def s(bit):
        return 1 - 2 * bit

    if name == "BPSK":
        return complex(s(b[0]), s(b[0])) / math.sqrt(2)
    if name == "QPSK":
        return complex(s(b[0]), s(b[1])) / math.sqrt(2)
    if name == "16QAM":
        i, q = s(b[0]) * (2 - s(b[2])), s(b[1]) * (2 - s(b[3]))
        return complex(i, q) / math.sqrt(10)
    if name == "64QAM":
        i = s(b[0]) * (4 - s(b[2]) * (2 - s(b[4])))
        q = s(b[1]) * (4 - s(b[3]) * (2 - s(b[5])))
        return complex(i, q) / math.sqrt(42)
    i = s(b[0]) * (8 - s(b[2]) * (4 - s(b[4]) * (2 - s(b[6]))))
    q = s(b[1]) * (8 - s(b[3]) * (4 - s(b[5]) * (2 - s(b[7]))))
    return complex(i, q) / math.sqrt(170)


def manual_text():
    import spatiq

    return (Path(spatiq.__file__).parent / "link" / "manual.md").read_text(encoding="utf-8")
