"""Parameters as PyTrees: constraints as separate bijections, whole trees mapped at once."""

from ._constraint import Constraint as Constraint
from ._constraint import Fixed as Fixed
from ._constraint import Free as Free
from ._constraint import Interval as Interval
from ._constraint import OffDiagonal as OffDiagonal
from ._constraint import Positive as Positive
from ._tree import all_finite as all_finite
from ._tree import constrain as constrain
from ._tree import unconstrain as unconstrain
