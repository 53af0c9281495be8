"""The order of work: build, resolve, design, run, judge, report."""
