"""The arithmetic: losses in, measures, contributions and their errors out; no I/O, no clock, no HTTP."""
