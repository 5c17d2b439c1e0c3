"""Tree flow: work is pushed between the halves of nested server sets, each task for one of the sets."""

from typing import Any, ClassVar

import numpy as np

from labkit.checks import check_member, check_whole
from labkit.errors import InputError
from labkit.fleet.model import Fleet
from labkit.policies.base import WITH_REPORTS, Policy
from labkit.policies.static_split import bounds_of
from labkit.policies.tree_choosers import CHOOSERS, after, renew
from labkit.policies.tree_frame import Frame, frame_of, whole_capacities
from labkit.policies.tree_tables import WHOLE, choice_tables, server_tables
from labkit.survey.strengths import (
    equal_strengths,
    forecast_spread,
    optimised_strengths,
    strengths_with_coin,
)

STRENGTHS, LEFTOVERS = ("optimised", "equal"), ("least-loaded", "coin")
RESPONSES, STEERING = ("sign", "linear"), ("net", "drawn")
# A linear response is full for differences of this many standard deviations.
FULL_AT = 2.0
# Default age of the differences, in tasks a server; in small fleets keeping them up to date costs little.
ROUNDS, FEW = 2, 256


class TreeFlow(Policy):
    """Balance the halves of nested server sets by flows, each of which changes one difference and no other.

    The servers are halved again and again. For each set there is a flow along the choices that moves work
    from one half to the other in proportion to capacity, so that only the difference D of the halves' mean
    utilisations changes. Each set pushes along its flow, with its strength, the way that lowers its |D|, and
    not at all where D = 0. What the pushes along a choice come to is the probability that a task there goes
    their way; all other tasks are left over.

    Parameters
    ----------
    strengths : {"optimised", "equal"}
        Of the sets that least-loaded alone would leave far apart, each as large as its share of its choices
        allows and its network rewards; or one for all sets, the largest possible.
    leftover : {"least-loaded", "coin"}
        What tasks do that are not steered: go to the lower utilisation, or by fixed fair probabilities.
    response : {"sign", "linear"}
        Whether a set pushes with all its strength, or for a small difference in proportion to it.
    steering : {"net", "drawn"}
        Whether opposite pushes along a choice cancel, so that more tasks are left over, or each task draws at
        most one set in constant time, by an alias table. Beside a coin both have the same law.
    every : int, optional
        Work out the differences anew from the loads seen just before the tasks 1, every + 1, ...; 0 keeps
        them up to date with each placement, or with each report where reports are late. Default: 2 tasks a
        server, and 0 for fewer than 256 servers.

    Raises
    ------
    InputError
        When a parameter is none of these; where it is used, also for a fleet whose choices are not listed.

    Notes
    -----
    ``tree-flow(strengths=equal, leftover=coin)`` is balancing by orthogonal flows over a hierarchical
    decomposition, a published rule; the other settings are this project's own. A dispatcher needs D of the
    sets, and for each choice a table of about as many entries as sets are nested (`memory`). Differences
    that are two tasks a server old do as well as present ones: on a ring of 256 the mean gap is 8.85 with
    them and 8.80 without.

    The same fleet has the same tables in every run. The halves are those of the library `pymetis` where it is
    installed (always with the same seed and one cut), and otherwise our own: both serve, but they differ, so
    results to the bit need it on both sides or on neither.

    Examples
    --------
    >>> import labkit as lk
    >>> rule = lk.TreeFlow(strengths="equal", leftover="coin")
    >>> rule.name, lk.TreeFlow().name
    ('tree-flow(strengths=equal, leftover=coin)', 'tree-flow')
    >>> lk.TreeFlow().renewal(lk.ring(1000))
    2000
    """

    knows = "the loads of the options, and for each of its server sets which half is fuller"
    by_table: ClassVar[bool] = True
    looks_far = True
    renew = staticmethod(renew)
    after = staticmethod(after)

    def __init__(
        self,
        strengths: str = "optimised",
        leftover: str = "least-loaded",
        response: str = "sign",
        steering: str = "net",
        every: int | None = None,
    ) -> None:
        self.strengths = check_member("strengths", strengths, STRENGTHS)
        self.leftover = check_member("leftover", leftover, LEFTOVERS)
        self.response = check_member("response", response, RESPONSES)
        self.steering = check_member("steering", steering, STEERING)
        self.every = None if every is None else check_whole("every", every, least=0)
        self.choose = CHOOSERS[self.steering, self.response, self.leftover]

    @property
    def name(self) -> str:
        """The policy in words, with the parameters that are not at their defaults."""
        given = {
            "strengths": self.strengths if self.strengths != STRENGTHS[0] else None,
            "leftover": self.leftover if self.leftover != LEFTOVERS[0] else None,
            "response": self.response if self.response != RESPONSES[0] else None,
            "steering": self.steering if self.steering != STEERING[0] else None,
            "every": self.every,
        }
        inside = ", ".join(f"{name}={value}" for name, value in given.items() if value is not None)
        return f"tree-flow({inside})" if inside else "tree-flow"

    @property
    def kernel_name(self) -> str:
        """The word that keys compiled code."""
        return f"TreeFlow_{self.steering}_{self.response}_{self.leftover.replace('-', '_')}"

    def renewal(self, fleet: Fleet) -> int:
        """Return after how many tasks the differences are worked out anew."""
        every = self.every
        if every is None:
            every = 0 if fleet.size < FEW else ROUNDS * fleet.size
        return WITH_REPORTS if every == 0 else every

    def strengths_of(self, fleet: Fleet) -> np.ndarray:
        """Return the strength of each set of `frame_of(fleet).tree`.

        Parameters
        ----------
        fleet : Fleet
            With a table of choices.

        Returns
        -------
        float64 array, shape (sets,)
            Probability, per unit demand and unit flow, with which a task draws the set.

        Raises
        ------
        InputError
            When the choices of the fleet are not listed.

        Examples
        --------
        A ring of 4 is halved, and each half once more: three sets.

        >>> import labkit as lk
        >>> lk.TreeFlow(strengths="equal", leftover="coin").strengths_of(lk.ring(4)).round(3).tolist()
        [1.0, 1.0, 1.0]
        """
        frame = self._frame(fleet)
        flows, authority = frame.flows, frame.pairs.authority
        if self.strengths == "equal":
            return equal_strengths(flows, authority, frame.part)
        if self.leftover == "coin":
            return strengths_with_coin(flows, authority, frame.weight, frame.part)
        return optimised_strengths(
            flows, authority, frame.pairs.usable, frame.weight, frame.part, frame.efficiency
        )

    def prepare(self, fleet: Fleet) -> tuple[Any, ...]:
        """Return differences, tables of the choices and of the servers, slopes and fixed probabilities."""
        frame, strength = self._frame(fleet), self.strengths_of(fleet)
        used = strength > 0.0
        number = np.cumsum(used) - 1
        head, entries, value, taken = choice_tables(fleet, self.steering, frame, strength, number)
        start, sets, step = server_tables(fleet, frame, used, number)
        slope = np.zeros(0)
        if self.response == "linear":
            local = self.leftover == "least-loaded"
            spread = forecast_spread(frame.flows, frame.pairs.authority, strength, local=local, linear=True)
            unit = whole_capacities(fleet).mean() / (frame.first * frame.second)
            scale = 1.0 if self.steering == "net" else float(WHOLE)
            slope = np.append((scale * unit / (FULL_AT * np.maximum(spread, 1e-300)))[used], 0.0)
        bounds = np.zeros((0, 1), np.uint64)
        if self.leftover == "coin":
            taken = 0.0 if self.steering == "net" else taken
            bounds = np.rint(bounds_of(np.maximum(frame.pairs.carried - taken, 0.0)) * WHOLE).astype(
                np.uint64
            )
        keeps = int(self.renewal(fleet) == WITH_REPORTS)
        # One more than there are: a choice without entries reads it, and does not use it.
        difference = np.zeros(int(used.sum()) + 1)
        width = fleet.options.shape[1]
        return difference, head, entries, start, sets, step, slope, bounds, keeps, value, width

    def own_state(self, state: tuple[Any, ...]) -> tuple[Any, ...]:
        """Return the state with differences of its own."""
        return (state[0].copy(), *state[1:])

    def memory(self, fleet: Fleet) -> dict[str, float]:
        """Return what a dispatcher's tables hold.

        Parameters
        ----------
        fleet : Fleet
            With a table of choices.

        Returns
        -------
        dict
            `sets`; `entries_mean` and `entries_max`, entries a choice on average and at most; `bytes` of all
            tables.

        Raises
        ------
        InputError
            When the choices of the fleet are not listed.

        Examples
        --------
        >>> import labkit as lk
        >>> tables = lk.TreeFlow(strengths="equal").memory(lk.ring(4))
        >>> tables["sets"], tables["entries_max"]
        (3, 1)
        """
        state = self.prepare(fleet)
        size = sum(part.nbytes for part in state if isinstance(part, np.ndarray))
        if self.steering == "net":
            # Those of value 0 only fill rows up.
            rows = np.repeat(np.arange(state[1].size - 1), np.diff(state[1]))
            pairs = np.bincount(rows[state[9][:-1] != 0], minlength=state[1].size - 1)
            entries = pairs.reshape(len(fleet.options), -1).sum(axis=1)
        else:
            entries = state[1][:, 1].astype(np.int64)
        return {
            "sets": state[0].size - 1,
            "entries_mean": float(entries.mean()),
            "entries_max": int(entries.max()),
            "bytes": size,
        }

    def table(self, fleet: Fleet) -> Any:
        """Return the levels of the hierarchy.

        Parameters
        ----------
        fleet : Fleet
            With a table of choices.

        Returns
        -------
        pandas.DataFrame
            One row a level, from the whole fleet (level 0) down: sets, servers (mean number), strength
            (mean), and share_of_demand, the share of all demand that draws a set of this level.

        Raises
        ------
        InputError
            When the choices of the fleet are not listed.

        Examples
        --------
        >>> import labkit as lk
        >>> lk.TreeFlow(strengths="equal", leftover="coin").table(lk.ring(4)).round(3)
           level  sets  servers  strength  share_of_demand
        0      0     1      4.0       1.0             0.25
        1      1     2      2.0       1.0             0.50
        """
        import pandas as pd

        frame, strength = self._frame(fleet), self.strengths_of(fleet)
        tree, flows = frame.tree, frame.flows
        draws = np.bincount(flows.owner, np.abs(flows.amount), strength.size) * strength / fleet.size
        rows = pd.DataFrame(
            {
                "level": tree.level,
                "sets": 1,
                "servers": tree.high - tree.low,
                "strength": strength,
                "share_of_demand": draws,
            }
        )
        how = {"sets": "sum", "servers": "mean", "strength": "mean", "share_of_demand": "sum"}
        return rows.groupby("level", as_index=False).agg(how)

    def _frame(self, fleet: Fleet) -> Frame:
        if fleet.implicit is not None:
            raise InputError(
                "policy tree-flow needs a table of choices; on a complete fleet there is nothing far apart "
                "to steer, so use least-loaded."
            )
        return frame_of(fleet)
