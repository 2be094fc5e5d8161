"""Command line, configs, run folders and the report: everything that knows files, clocks and tools.

Floor: the top one.  Modules are imported when they are needed, so that `--help` loads none of them.
"""
