"""The codec of the ramprig line protocol: bytes in, values out, with no time, threads, files or logging in it.

Read it upwards:

    words      the protocol's words, numbers and tables (made from protocol.toml)
    faults     every exception raised here
    check      the check of a line, the digest of the limits
    lines      a stream of bytes cut into lines
    fields     the one spelling of each field
    messages   a line as a request, answer, notice or data
    samples    packed and plain samples
    device     the device's end: exactly once, refusals, running numbers
    host       the host's end: one request at a time, repeats, gaps

SPEC.md is the text all this follows.
"""
