"""ramprig: a hardware-in-the-loop serial console and scripting runtime for motor benches."""

__version__ = "0.1.0"
