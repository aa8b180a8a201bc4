"""The acceptance test for a board that speaks the line protocol: checks by clause, a verdict, a report.

`examine.accept` runs it on an open port. It knows `ramprig_link`, ports, and of `session` the parts that only read what
a device tells (`readings`, `ticks`, `limits`); it does not use a session, which would never say what it must say here.
"""
