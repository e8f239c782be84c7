"""8b10b worst cases by the longest path over whole characters, with numpy.

The characters are built from the published sub-blocks (Widmer and Franaszek 1983; IEEE 802.3 tables
36-1 and 36-2, from memory), written down a second time: balance decides the disparity, complements
the other column. Prints JSON: the most that N equal symbols in a row can sum to, and random rows
with their worst case for each position of the main symbol (pushed down).
"""

import json

import numpy as np

SIX = """100111 011101 101101 110001 110101 101001 011001 111000 111001 100101 010101 110100 001101
101100 011100 010111 011011 100011 010011 110010 001011 101010 011010 111010 110011 100110 010110
110110 001110 101110 011110 101011""".split()
FOUR = "1011 1001 0101 1100 1101 1010 0110 1110".split()
FOUR_OF_K28 = "1011 0110 1010 1100 1101 0101 1001 0111".split()


def flipped(word):
    return word.translate(str.maketrans("01", "10"))


def sent(word, disparity, always):
    balanced = 2 * word.count("1") == len(word)
    out = flipped(word) if disparity > 0 and (always or not balanced) else word
    return out, disparity if balanced else -disparity


def characters(disparity):
    for x in range(32):
        six, between = sent(SIX[x], disparity, x == 7)
        for y in range(8):
            word, always = FOUR[y], y == 3
            if y == 7 and x in ((17, 18, 20) if between < 0 else (11, 13, 14)):
                word = "0111"
            four, after = sent(word, between, always)
            yield six + four, after
        if x in (23, 27, 29, 30):
            four, after = sent("0111", between, True)
            yield six + four, after
    six, between = sent("001111", disparity, False)
    for y in range(8):
        four, after = sent(FOUR_OF_K28[y], between, True)
        yield six + four, after


WORDS, AFTER = {}, {}
for d in (-1, 1):
    pairs = list(characters(d))
    WORDS[d] = np.array([[2.0 * int(bit) - 1.0 for bit in word] for word, _ in pairs])
    AFTER[d] = np.array([after for _, after in pairs])
    assert len(pairs) == 268 and len({word for word, _ in pairs}) == 268


def longest(weights, position, main):
    """Most of weights . symbols; symbol `main` stands at `position` and is +1 (none if None)."""
    before = (position - (main or 0)) % 10
    after = -(before + len(weights)) % 10
    padded = np.concatenate([np.zeros(before), weights, np.zeros(after)])
    value = {-1: 0.0, 1: 0.0}
    for at in range(0, len(padded), 10):
        following = {-1: -np.inf, 1: -np.inf}
        for d in (-1, 1):
            sums = value[d] + WORDS[d] @ padded[at : at + 10]
            if main is not None and at <= before + main < at + 10:
                sums = np.where(WORDS[d][:, before + main - at] > 0, sums, -np.inf)
            for end in (-1, 1):
                following[end] = max(following[end], sums[AFTER[d] == end].max())
        value = following
    return max(value.values())


flat = {n: max(longest(np.ones(n), p, None) for p in range(10)) for n in range(20, 81)}

rows = []
random = np.random.default_rng(7)
for length, main_index in ((200, 20), (200, 0), (57, 56), (33, 11)):
    row = random.uniform(-1.0, 1.0, length)
    weights = -row[::-1].copy()
    main = length - 1 - main_index
    weights[main] = 0.0
    worst = [longest(weights, p, main) for p in range(10)]
    rows.append({"row": row.tolist(), "main_index": main_index, "worst": worst})

print(json.dumps({"flat": list(flat.values()), "rows": rows}))
