"""Chapter 4 of manual.md as plain Python, written from its words alone: word -> what antennas send.

No code of the package, no NumPy. `vectors(word)` gives the rows of the word's symbol periods.
"""

from __future__ import annotations

import cmath
import itertools
import math


def power_of_two_below(count):
    k = 0
    while 2 ** (k + 1) <= count:
        k += 1
    return 2**k


class PlainScheme:
    """`symbol(label)` gives the constellation's point; `points` is M, 1 without a constellation."""

    def __init__(self, modulation, antennas, symbol, points):
        self.table, self.antennas, self.symbol = modulation, antennas, symbol
        self.m = int(math.log2(points))
        self.scheme = modulation["scheme"]
        self.choices = self.list_of_choices()
        k = int(math.log2(len(self.choices)))
        spatial, signal = k, self.m
        if self.scheme == "quadrature-spatial-modulation":
            spatial = 2 * k
        if modulation.get("streams") == "independent":
            signal = len(self.choices[0]) * self.m
        if self.differential:
            signal = antennas * self.m
        if self.scheme == "vector-table":
            spatial, signal = 0, int(math.log2(len(modulation["words"])))
        self.bits = spatial + signal
        places = modulation.get("spatial_bits", "first")
        if places == "first":
            places = list(range(spatial))
        elif places == "last":
            places = list(range(signal, self.bits))
        self.places = places
        self.start()

    @property
    def differential(self):
        return self.scheme == "differential-spatial-modulation"

    def list_of_choices(self):
        """What the spatial value selects from."""
        table, everyone = self.table, range(self.antennas)
        if self.scheme.startswith("generalised"):
            if "antenna_sets" in table:
                return table["antenna_sets"]
            sets = list(itertools.combinations(everyone, table["active_antennas"]))
            return sets[: power_of_two_below(len(sets))]
        if self.differential:
            if "permutations" in table:
                return table["permutations"]
            orders = list(itertools.permutations(everyone))
            return orders[: min(power_of_two_below(len(orders)), 256)]
        if self.scheme == "vector-table":
            return [0]
        return table.get("antenna_order", list(everyone))

    def start(self):
        """The reference block of the differential form."""
        self.a, self.f = list(range(self.antennas)), [0.0] * self.antennas
        return self.block()

    def block(self):
        rows = []
        for a, f in zip(self.a, self.f, strict=True):
            rows.append([cmath.exp(1j * f) if i == a else 0j for i in range(self.antennas)])
        return rows

    def vectors(self, word):
        """Rows of the word's periods: one, or Nt in differential form."""
        if self.scheme == "vector-table":
            return [self.written_down(word)]
        value = 0
        for place in self.places:
            value = 2 * value + word[place]
        label = [b for i, b in enumerate(word) if i not in self.places]
        if self.differential:
            return self.next_block(self.choices[value], label)
        row = [0j] * self.antennas
        if self.scheme == "quadrature-spatial-modulation":
            r, i = divmod(value, len(self.choices))
            s = complex(self.symbol(label))
            row[self.choices[r]] += s.real
            row[self.choices[i]] += 1j * s.imag
        elif self.scheme.startswith("generalised"):
            members = self.choices[value]
            own = self.table.get("streams") == "independent"
            for j, antenna in enumerate(members):
                mine = label[j * self.m : (j + 1) * self.m] if own else label
                row[antenna] = complex(self.symbol(mine)) / math.sqrt(len(members))
        else:
            row[self.choices[value]] = complex(self.symbol(label))
        return [row]

    def next_block(self, p, label):
        zero = cmath.phase(complex(self.symbol([0] * self.m)))
        parts = [label[j * self.m : (j + 1) * self.m] for j in range(self.antennas)]
        u = [cmath.phase(complex(self.symbol(part))) - zero for part in parts]
        a, f = self.a, self.f
        self.a = [a[p[j]] for j in range(self.antennas)]
        self.f = [f[p[j]] + u[j] for j in range(self.antennas)]
        return self.block()

    def written_down(self, word):
        text = "".join(map(str, word))
        rows = {}
        for entry in self.table["words"]:
            row = [0j] * self.antennas
            for antenna, symbol in zip(entry["antennas"], entry["symbols"], strict=True):
                row[antenna] = complex(*symbol) if isinstance(symbol, list) else complex(symbol)
            rows[entry["word"]] = row
        scale = 1.0
        if self.table["normalise"]:
            power = sum(abs(x) ** 2 for row in rows.values() for x in row) / len(rows)
            scale = 1 / math.sqrt(power)
        return [x * scale for x in rows[text]]
