"""Parameters as PyTrees: constraints as separate bijections, whole trees mapped at once."""

from ._constraint import (
    Constraint as Constraint,
    Fixed as Fixed,
    Free as Free,
    Interval as Interval,
    OffDiagonal as OffDiagonal,
    Positive as Positive,
)
from ._tree import all_finite as all_finite, constrain as constrain, unconstrain as unconstrain
