"""The safety texts that travel with everything shown.

Sources: FDA guidance on clinical decision support software of 2022 (independent review of the basis); the
alert policy of this project's evidence.
"""

from __future__ import annotations

from typing import Final

SAFETY_TEXTS: Final = (
    "Supports clinical judgement and does not replace it. Local protocols come first.",
    "Every line names the entries, sources, ages and cut-offs it rests on, so that you can check them.",
    "Not for children or in pregnancy unless a line says so. Not validated prospectively.",
    "That nothing is shown is no reassurance.",
    "Bedside findings have poor observer agreement; listening again comes before doubting a tracing.",
    "No diagnosis is stated as fact, no drug, dose or procedure is proposed, no entry is ever changed.",
    "A probability is shown only for a pretest value that you entered.",
)
SHORT: Final = f"{SAFETY_TEXTS[0]} {SAFETY_TEXTS[3]}"
