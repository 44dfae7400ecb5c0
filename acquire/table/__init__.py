"""Tables measured elsewhere: delimited text in any dialect, read as one reader's readings.

What a table holds is never guessed at where a wrong guess would be a wrong number: a cell is a
number beyond doubt, or its row is counted as bad and not used.
"""

from acquire.table.measured import BadRow, MeasuredFile, MeasuredTable, TableReadings
from acquire.table.source import read_table

__all__ = ["BadRow", "MeasuredFile", "MeasuredTable", "TableReadings", "read_table"]
