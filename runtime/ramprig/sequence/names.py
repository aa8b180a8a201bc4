"""The shapes of names in a sequence file."""

from __future__ import annotations

from ramprig.yamlfile import TextShape
from ramprig.yamlfile.reader import WORDY_NAME

MOTOR_NAME = TextShape(WORDY_NAME.pattern, "the name of a motor in the bench file is wanted, such as 'vent'")
SERVO_NAME = TextShape(WORDY_NAME.pattern, "the name of a servo in the bench file is wanted, such as 'latch'")
MARK_NAME = TextShape(WORDY_NAME.pattern, "1 to 24 of a-z, 0-9 and _, the first a letter")
CYCLE_BEGIN = "cycle begin"
"""The mark that each cycle sets where it begins; no mark of a file can be called so."""
