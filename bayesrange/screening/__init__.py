"""A look at the data before anything is fitted: what is doubtful, how much is there, what it can carry.

Pure computing: no files are written and nothing is drawn. The flags themselves are in `bayesrange.study`, because the
reader drops by them.
"""

from bayesrange.screening._carrying import CardLike as CardLike
from bayesrange.screening._carrying import Carried as Carried
from bayesrange.screening._carrying import Evidence as Evidence
from bayesrange.screening._carrying import carried as carried
from bayesrange.screening._companions import FEWEST as FEWEST
from bayesrange.screening._companions import NEAR_M as NEAR_M
from bayesrange.screening._companions import TOGETHER as TOGETHER
from bayesrange.screening._companions import travelling_pairs as travelling_pairs
from bayesrange.screening._rates import Rhythm as Rhythm
from bayesrange.screening._rates import commonest_interval_h as commonest_interval_h
from bayesrange.screening._rates import rhythm as rhythm
from bayesrange.screening._screening import UNSOUND as UNSOUND
from bayesrange.screening._screening import Screening as Screening
from bayesrange.screening._screening import look as look
from bayesrange.screening._settling import Settling as Settling
from bayesrange.screening._settling import settling as settling
