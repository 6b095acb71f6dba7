"""From a review to the few lines a clinician sees: the alert policy, its memory, and the printed sheets."""
