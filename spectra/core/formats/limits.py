"""Bounds of the readers. No input may take more than 2 s or 300 MB; `tests/bench/bench_reading.py` measures it.

Real infrared files hold up to about 60,000 points in 0.5 MB; the bounds leave a wide margin above that.
"""

MAX_FILE_BYTES = 32 * 1024 * 1024
MAX_LINES = 500_000
MAX_LINE_CHARACTERS = 65_536
MAX_POINTS = 1_000_000  # of all blocks of a file together, after DUP expansion
MAX_LABELS = 20_000
MAX_BLOCKS = 256
MAX_NESTING = 8
MAX_COLUMNS = 64  # of a delimited text
MAX_HEADERS_KEPT = 200  # for each block
MAX_HEADER_CHARACTERS = 2_000
MAX_TITLE_CHARACTERS = 200
