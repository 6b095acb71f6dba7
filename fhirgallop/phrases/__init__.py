"""Reads one line of a cardiovascular examination, as clinicians write it, into findings.

Deterministic: wordings are data (`terminology/phrases/<language>.csv`), the grammar is small, and what was
not understood comes back with its place. Scope of negation, doubt, past and family follows the published
ideas of NegEx (Chapman et al., J Biomed Inform 2001;34:301-310) and ConText (Harkema et al., J Biomed Inform
2009;42:839-851); the code is our own.
"""

from fhirgallop.phrases.findings import ReadFinding, ReadLine, Unread
from fhirgallop.phrases.reader import MAX_CHARACTERS, LineReader, languages, reader

__all__ = ["MAX_CHARACTERS", "LineReader", "ReadFinding", "ReadLine", "Unread", "languages", "reader"]
