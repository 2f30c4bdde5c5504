"""The command line: parse, call, write, exit code. No statistics and no defaults of its own.

Exit codes: 0 done; 2 usage, also a refused plan; 3 data refused, every problem listed;
130 interrupted; 1 anything else. Results go to stdout, progress and notes to stderr.
"""

from robustrm.cli import size
from robustrm.cli.commands import main

__all__ = ["main", "size"]
