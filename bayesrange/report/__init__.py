"""What a reader gets from a finished fit: tables, maps for a GIS, and one self-contained page.

Works from a run folder alone: no study files, no sampler.
"""

from bayesrange._callable import make_callable
from bayesrange.report._decay import decay_table as decay_table
from bayesrange.report._differences_write import check_differences_folder as check_differences_folder
from bayesrange.report._differences_write import write_differences as write_differences
from bayesrange.report._isopleths import isopleth_outlines as isopleth_outlines
from bayesrange.report._read import Contents as Contents
from bayesrange.report._read import read_contents as read_contents
from bayesrange.report._read_memory import MemoryContents as MemoryContents
from bayesrange.report._read_memory import read_memory as read_memory
from bayesrange.report._screening_page import summary as summary
from bayesrange.report._screening_write import screen as screen
from bayesrange.report._tables import overlaps_table as overlaps_table
from bayesrange.report._tables import ranges_table as ranges_table
from bayesrange.report._write import write as write

make_callable(__name__, write)
