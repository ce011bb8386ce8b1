"""What the user brings: study file, relocations, groups, layers, the grid; and what autocorrelation leaves of it."""

from bayesrange._errors import StudyError as StudyError
from bayesrange.study._autocorrelation import Weights as Weights
from bayesrange.study._autocorrelation import autocorrelation_weights as autocorrelation_weights
from bayesrange.study._autocorrelation import interval_weights as interval_weights
from bayesrange.study._bare import BareStudy as BareStudy
from bayesrange.study._bare import read_bare as read_bare
from bayesrange.study._cell_size import across_m as across_m
from bayesrange.study._daylight import solar_clock as solar_clock
from bayesrange.study._epochs import Epochs as Epochs
from bayesrange.study._flags import DROPPABLE as DROPPABLE
from bayesrange.study._flags import FLAGS as FLAGS
from bayesrange.study._flags import find_flags as find_flags
from bayesrange.study._grid import Grid as Grid
from bayesrange.study._guess import Guess as Guess
from bayesrange.study._guess import guess_fixes as guess_fixes
from bayesrange.study._layers import Layer as Layer
from bayesrange.study._ornstein import CrossingTime as CrossingTime
from bayesrange.study._ornstein import OrnsteinUhlenbeck as OrnsteinUhlenbeck
from bayesrange.study._read import Study as Study
from bayesrange.study._read import read_study as read_study
from bayesrange.study._settings import StudySettings as StudySettings
from bayesrange.study._settings_file import locate_study as locate_study
from bayesrange.study._settings_file import read_settings as read_settings
