"""The command line ``modewright``: problem documents and NPZ or CSV files in, files and a JSON summary out.

Exit codes: 0 done; 2 the command line itself is wrong; 3 the document, a file or a number in it was refused;
4 the service failed, refused to start or could not be reached; 5 a defect of this program; 130 interrupted.
"""

from modewright.cli.main import main

__all__ = ["main"]
