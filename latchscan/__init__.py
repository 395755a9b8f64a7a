"""Estimate where a CMOS block's parasitic thyristors can latch.

The package reads a layout and a technology file, derives wells, taps and diffusions,
solves for the resistances seen by every emitter, evaluates the four-layer loop at every
site and reports findings.  The pipeline is ``latchscan.scan``; start reading there.
"""

__version__ = "0.1.0"
