"""One session: read, run the stages (unchanged ones are read back), write, report.

Import from its modules: `options`, `run`, `records`, `begin`, `again`.
"""
