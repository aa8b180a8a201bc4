"""Run folders read back for people: the report, JUnit XML, and why a run ended as it did."""
