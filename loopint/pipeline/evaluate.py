"""One row of the points: every integral of the plan, or the reason why the row is rejected."""

from __future__ import annotations

import time
from dataclasses import dataclass
from typing import TYPE_CHECKING

from loopint.core.errors import InputError, LoopintError, MorePrecisionNeeded
from loopint.core.numbers import imaginary_part, real_part, rounds_uniquely
from loopint.core.time_limit import TimeLimitError, time_limit
from loopint.integrals.registry import Evaluator

if TYPE_CHECKING:
    from collections.abc import Iterable, Sequence

    from loopint.core.conventions import Conventions
    from loopint.core.laurent import BallSeries
    from loopint.integrals.proof import Evaluation
    from loopint.integrals.registry import Integral
    from loopint.pipeline.plan import Cells, IntegralPlan, RowRequest


@dataclass(frozen=True, slots=True)
class Computed:
    """One integral of one row: what was asked, the proven answer, and what it took."""

    request: RowRequest
    evaluation: Evaluation
    seconds: float = 0.0

    @property
    def name(self) -> str:
        """The name of the integral in the config."""
        return self.request.name


class RowRejectedError(LoopintError):
    """A row that cannot be evaluated; `integral` is the name of the integral that failed."""

    def __init__(self, integral: str, reason: str) -> None:
        super().__init__(reason)
        self.integral = integral
        self.reason = reason


def rounds_to_floats(series: BallSeries, orders: tuple[int, int]) -> bool:
    """Whether real and imaginary part of every order have one nearest float64."""
    return all(
        rounds_uniquely(real_part(series[k])) and rounds_uniquely(imaginary_part(series[k]))
        for k in range(orders[0], orders[1] + 1)
    )


def row_requests(plans: Sequence[IntegralPlan], cells: Cells) -> list[RowRequest]:
    """Return point and conventions of every integral of a row.

    Raises
    ------
    RowRejectedError
        If a cell or the kinematics of one of them cannot be used.
    """
    requests = []
    for plan in plans:
        try:
            requests.append(plan.request(cells))
        except InputError as error:
            raise RowRejectedError(plan.name, str(error)) from None
    return requests


class RowEvaluator:
    """Evaluates integrals row by row, each with an evaluator that its rows share.

    Parameters
    ----------
    plans
        All integrals.
    digits, max_precision_bits
        See `loopint.integrals.registry.Evaluator`; on top of the digits the coefficients are proven
        far enough to have one nearest float64.
    seconds
        The time limit of each integral of a row; what exceeds it has status "timed_out".
    """

    def __init__(
        self,
        plans: Sequence[IntegralPlan],
        digits: int,
        max_precision_bits: int,
        seconds: float | None = None,
    ) -> None:
        self.plans = plans
        self.digits = digits
        self.max_precision_bits = max_precision_bits
        self.seconds = seconds
        self._evaluators = [
            self._evaluator(plan.integral, plan.fixed_conventions)
            if plan.has_fixed_conventions
            else None
            for plan in plans
        ]

    def _evaluator(self, integral: Integral, conventions: Conventions) -> Evaluator:
        return Evaluator(
            integral,
            conventions,
            digits=self.digits,
            max_precision_bits=self.max_precision_bits,
        )

    def row(self, cells: Cells) -> list[Computed]:
        """Evaluate every integral of a row; see `some`."""
        return list(self.some(cells, range(len(self.plans))).values())

    def some(self, cells: Cells, wanted: Iterable[int]) -> dict[int, Computed]:
        """Evaluate some integrals of a row, by their place in the plans.

        Parameters
        ----------
        cells
            Exact value, or the error, of every cell the plans use.
        wanted
            Places of the integrals to be evaluated; the kinematics of the others are checked too.

        Raises
        ------
        RowRejectedError
            If one of the integrals cannot be evaluated: the row is then rejected as a whole.
        """
        requests = row_requests(self.plans, cells)
        found = {}
        for place in wanted:
            started = time.perf_counter()
            evaluation = self._evaluate(place, requests[place])
            found[place] = Computed(requests[place], evaluation, time.perf_counter() - started)
        return found

    def _evaluate(self, place: int, request: RowRequest) -> Evaluation:
        orders = request.integral.orders
        evaluator = self._evaluators[place]
        if evaluator is None:
            evaluator = self._evaluator(request.integral, request.conventions)
        try:
            with time_limit(self.seconds):
                return evaluator(request.point, lambda series: rounds_to_floats(series, orders))
        except TimeLimitError:
            return evaluator.out_of_time(request.point)
        except LoopintError as error:
            reason = str(error)
        except MorePrecisionNeeded:
            cap = self.max_precision_bits
            reason = f"undecided at max_precision_bits = {cap}; accepted: a larger cap"
        except (
            ArithmeticError, AssertionError, LookupError, RuntimeError, TypeError, ValueError,
        ) as error:  # fmt: skip
            # One row must not end a run of millions, and must not be lost either.
            reason = f"unexpected {type(error).__name__}: {error} (a defect; please report it)"
        raise RowRejectedError(request.name, reason)
