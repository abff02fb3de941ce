"""Values from outside the project, each with its source beside it.

A source that was not read in full says so: "abstract" means that only the abstract was read, "from memory"
that the value was not looked up again.  "Computed" values were found in two ways that agree.
Grid coordinates are odd integers (half-spacing a = 1); labels are written most significant bit (b0) first.

tests/golden/golden_*.csv: LLRs, exact and max-log, computed with 80-digit mpmath from the definition and
again, unshifted, with 60 digits (agreement 5e-30); y and N0 are exact doubles.  16qam and 64qam carry the
labels of 3GPP TS 38.211, 32cross those of `cross_qam`; all have unit energy, but the *_grid twins a = 1.
tests/golden/labels_*.csv: label tables, computed from the rules quoted in `pydemap.mapping` and
`pydemap.cross_qam` by a program apart from them.
"""

from fractions import Fraction

# Constellations: energies, distances, neighbours, Gray penalties.

# Computed exactly with fractions; the formulas are textbook.
# order: (E / a^2, minimum distance at unit energy, peak to mean energy, the same in dB, mean neighbours)
SQUARE_FACTS = {
    4: (2, 1.414213562373095, Fraction(1), 0.0, Fraction(2)),
    16: (10, 0.6324555320336759, Fraction(9, 5), 2.5527251, Fraction(3)),
    64: (42, 0.3086066999241838, Fraction(7, 3), 3.6797679, Fraction(7, 2)),
    256: (170, 0.1533929977694741, Fraction(45, 17), 4.2276359, Fraction(15, 4)),
    4096: (2730, 0.03827795011754764, Fraction(189, 65), 4.6354845, Fraction(63, 16)),
}
CROSS_FACTS = {
    32: (20, 0.4472135954999579, Fraction(17, 10), 2.3044892, Fraction(13, 4)),
    128: (82, 0.2208630521496931, Fraction(85, 41), 3.1663507, Fraction(29, 8)),
    512: (330, 0.1100963765126361, Fraction(377, 165), 3.5885741, Fraction(61, 16)),
    2048: (1322, 0.05500653241360921, Fraction(1585, 661), 3.7982781, Fraction(125, 32)),
    8192: (5290, 0.02749806661015982, Fraction(6497, 2645), 3.9028719, Fraction(253, 64)),
}

# E / a^2 of the rectangle 2^(n+1) x 2^n and of the cross of the same order, and the ratio in dB (computed).
# Zhang, Yu and Wei, 2010, on Smith's cross: "at least a 1-dB gain" (abstract).
RECTANGLE_AND_CROSS = {(8, 4): (26, 20, 1.139), (16, 8): (106, 82, 1.115)}

# J. G. Smith, "Odd-bit quadrature amplitude-shift keying", IEEE Trans. Commun. COM-23, March 1975, 385-389:
# 7/6 at 32 and 1 + 1/sqrt(2M) + 1/(3M) beyond (from memory); equal to these values, computed with fractions.
CROSS_GRAY_PENALTY = {
    32: Fraction(7, 6),
    128: Fraction(409, 384),
    512: Fraction(1585, 1536),
    2048: Fraction(6241, 6144),
    8192: Fraction(24769, 24576),
}
# Mean number of differing bits over all pairs of nearest neighbours (computed with fractions).
CROSS_MEAN_OVER_PAIRS = {
    32: Fraction(15, 13),
    128: Fraction(31, 29),
    512: Fraction(63, 61),
    2048: Fraction(127, 125),
}
# Labels that are not Gray (computed likewise): Gray penalty, mean over pairs, largest number in a pair.
G9701_PENALTIES = {
    32: (Fraction(43, 24), Fraction(23, 13), 3),
    128: (Fraction(225, 128), Fraction(52, 29), 4),
}
DVB_C_32_PENALTIES = (Fraction(71, 48), Fraction(19, 13), 3)

# ETSI EN 300 429 (DVB-C), the same as ITU-T J.83 Annex A, 32-QAM (from memory): the last three bits of the
# points of quadrant I, where the first two are 00.  Turning by 90 degrees makes them 10, then 11, then 01.
DVB_C_32_QUADRANT_I = {
    (1, 1): "000",
    (3, 1): "001",
    (5, 1): "011",
    (1, 3): "100",
    (3, 3): "101",
    (5, 3): "111",
    (1, 5): "110",
    (3, 5): "010",
}
DVB_C_32_QUADRANTS = ["00", "10", "11", "01"]

# The cross of 32 with the labels of `cross_qam`, rows from Q = 5 down to -5, columns from I = -5 to 5
# (computed from the rule; its Gray penalty is Smith's).
CROSS_32_LABELS = """
  .   00010 00011 10011 10010   .
00110 01110 01010 11010 11110 10110
00111 01111 01011 11011 11111 10111
00101 01101 01001 11001 11101 10101
00100 01100 01000 11000 11100 10100
  .   00000 00001 10001 10000   .
"""
# Two rows of the cross of 128, columns I = 1, 3, 5, 7 (computed likewise).
CROSS_128_LABELS = {
    11: ["1000111", "1001111", "1001101", "1000101"],
    9: ["1000110", "1001110", "1001100", "1000100"],
}

# Published mappings: labels and levels.

# 3GPP TS 38.211 V16.10.0, clauses 5.1.4 to 5.1.6, and clause 5.1.7 of a later release (1024QAM): the bits of
# one axis for the levels +1, +3, +5 ...; for the negative level the first bit is 1, the others are the same.
TS_38_211_AXIS = {
    16: "00 01",
    64: "001 000 010 011",
    256: "0011 0010 0000 0001 0101 0100 0110 0111",
    1024: "00111 00110 00100 00101 00001 00000 00010 00011 01011 01010 01000 01001 01101 01100 01110 01111",
}

# IEEE 802.11, clause 17.3.5.8 (from memory; the rule, Gray on each axis, I bits first, most negative level
# all zeros, is in the working group's "256 QAM Mapping", Lauer et al., July 2010): level of the bits.
IEEE_802_11_AXIS = {
    4: {"0": -1, "1": 1},
    16: {"00": -3, "01": -1, "11": 1, "10": 3},
    64: {"000": -7, "001": -5, "011": -3, "010": -1, "110": 1, "111": 3, "101": 5, "100": 7},
}
# K_MOD^-2 of each order, the same clause and its extensions (from memory).
IEEE_802_11_ENERGY = {4: 2, 16: 10, 64: 42, 256: 170, 1024: 682, 4096: 2730}

# ITU-T "5G Basics", clause 10.2.1.4.2 (a reprint of Rec. G.9701), pp. 767-769 and 778-779.
# b = 5, rows Y = 5 ... -5, columns X = -5 ... 5.
G9701_32_LABELS = """
 .  24 26 20 22  .
19   9 11  1  3 17
18   8 10  0  2 16
31  13 15  5  7 29
30  12 14  4  6 28
 .  25 27 21 23  .
"""
# b = 3, by label (the figure, positions read from its columns).
G9701_8_POINTS = [(1, 1), (3, -1), (-1, -1), (1, -3), (-3, -3), (-1, 3), (3, 3), (-3, 1)]
# From b to b + 2: label n at (X, Y) becomes four round (2X, 2Y): top row 4n+1 4n+3, bottom row 4n 4n+2.
G9701_EXPANSION = {1: (-1, 1), 3: (1, 1), 0: (-1, -1), 2: (1, -1)}

# The eight points that ITU-T G.992.1 uses for b = 3 (from memory): the shape of `cross_qam(8)`, E = 6 a^2.
G992_1_8_POINTS = [(1, 1), (1, -1), (-1, 1), (-1, -1), (-3, 1), (1, 3), (-1, -3), (3, -1)]

# LLRs.

# Error that a plain double log-sum-exp keeps on tests/golden, in units of eps (1 + max |y - x|^2 / N0)
# (computed for 16qam and 32cross; 64qam is held to the same as 32cross).
GOLDEN_TOLERANCE = {"16qam": 1.6, "32cross": 2.5, "64qam": 2.5}
