"""Invented names, and how a till's text for one article changes when it comes back under a new code."""

import numpy as np

BRANDS = (
    "Aldervale", "Brimholt", "Casperine", "Dunmarrow", "Estwick", "Farrowby", "Glimmerdal", "Hask & Orrin",
    "Ingelund", "Jorvane", "Kelmscot", "Lindåsen", "Mirravel", "Norhaven", "Ostrelle", "Pinfold",
)  # fmt: skip
VARIANTS = (
    "apple", "raspberry", "elderflower", "pistachio", "cardamom", "rosehip", "mango", "lime", "plain", "toffee",
    "pear", "blackcurrant", "salted", "maple", "chai", "rhubarb", "passion fruit", "chestnut", "basil", "fennel",
)  # fmt: skip
GRADES = ("", "", "organic", "light")
NEWS = ("NEW", "new recipe", "improved")
TALK = ("delicious", "original", "fine")
# A third of relaunches keep their text; else it is reordered, announced as new, written with fewer vowels or in
# capitals to fit a till's line, or gains a word of praise or loses the kind of good. No count of these is published:
# the shares are about those of tests/stages/lookalikes.py, the words are not.
REWORDINGS = ("not", "order", "news", "short", "upper", "talk", "no kind")
REWORDED = (0.35, 0.15, 0.2, 0.15, 0.08, 0.04, 0.03)
# Two letters no longer say what a thing is.
SHORTEST = 3


def reword(rng: np.random.Generator, words: tuple[str, ...], kind: str) -> tuple[str, ...]:
    """The words of an article as its relaunch has them."""
    how = str(rng.choice(REWORDINGS, p=REWORDED))
    if how == "order":
        return tuple(words[place] for place in rng.permutation(len(words)))
    if how in {"news", "talk"}:
        return (*words, str(rng.choice(NEWS if how == "news" else TALK)))
    if how == "short":
        at = int(rng.integers(len(words)))
        return (*words[:at], shorten(words[at]), *words[at + 1 :])
    if how == "upper":
        return tuple(word.upper() for word in words)
    return tuple(word for word in words if word != kind) if how == "no kind" else words


def shorten(word: str) -> str:
    """The word without its inner vowels, as tills print it, if that can still be read."""
    short = word[0] + "".join(letter for letter in word[1:] if letter not in "aeiou")
    return short if len(short) >= SHORTEST else word


def respell(rng: np.random.Generator, brand: str) -> str:
    """The brand as another clerk types it."""
    plain = brand.replace(" & ", " ").replace("å", "a")
    return str(rng.choice((brand.upper(), plain.replace(" ", "-"), plain.replace(" ", ""), plain[:-1])))
