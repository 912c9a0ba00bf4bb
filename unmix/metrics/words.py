"""Words correct, predicted from STOI by the two published mappings.

With d the STOI, the share of words that listeners would repeat correctly is

    f(d) = 100 / (1 + exp(a d + b)) percent,

a and b fitted to listening tests with IEEE sentences, and with the closed-set Dantale II sentences [1]_. Other
sentences, listeners and rooms have other mappings: the figures put a gain into words, they do not predict a test.

.. [1] C. H. Taal, R. C. Hendriks, R. Heusdens, J. Jensen, "An algorithm for intelligibility prediction of
   time-frequency weighted noisy speech", IEEE Trans. Audio, Speech and Language Processing 19(7), 2011.
"""

from __future__ import annotations

import math

__all__ = ["CAUTION", "words_dantale_percent", "words_ieee_percent"]

IEEE = (-17.4906, 9.6921)
DANTALE = (-14.5435, 7.0792)
CAUTION = "words correct: mappings fitted to IEEE and Dantale II sentence tests; other material, listeners differ"


def words_ieee_percent(stoi: float) -> float:
    """Predicted share of words of IEEE sentences correct, in percent."""
    return _mapped(stoi, *IEEE)


def words_dantale_percent(stoi: float) -> float:
    """Predicted share of words of Dantale II sentences correct, in percent."""
    return _mapped(stoi, *DANTALE)


def _mapped(d: float, a: float, b: float) -> float:
    return 100.0 / (1.0 + math.exp(a * d + b))
