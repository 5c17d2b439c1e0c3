"""The door: `explore`, and what it returns."""

from typing import Any

from labkit.checks import check_whole
from labkit.errors import InputError
from labkit.explorer.sides import sides_of
from labkit.explorer.state import State, server_called
from labkit.explorer.words import alt_in_words
from labkit.fleet.model import Fleet, check_fleet
from labkit.sharing.audience import somebody_at_the_notebook
from labkit.survey.facts import Survey

# A fleet up to this size is drawn whole; of a larger one so few that they are laid out at once.
WHOLE, NEARBY = 300, 100
# More dots could not be told apart.
MOST = 400


class Explorer:
    """The choice graph of a fleet, to look around in; made by `explore`.

    In JupyterLab it is a drawing that answers clicks. In a notebook that a program executes, and in one
    that is opened without its kernel, it is a picture with the same facts beneath.

    Attributes
    ----------
    fleet : Fleet
    selected : str, int or None
        Name of the selected server; None when there is none, or when the bottleneck is selected.
    drawn : list
        Names of the servers that are drawn, in table order.
    loads : pandas.DataFrame
        What is selected under each rule: rule, load (work units), utilisation, highest (utilisation in any
        replicate), fullest (share of the replicates in which it is the fullest), replicates.
    neighbours : pandas.DataFrame
        Servers that share choices with the selected one: server, capacity, shared (demand of the choices with
        both), and the utilisation under each rule that is shown.
    widget : ipywidgets.VBox
        The drawing with its buttons, made when it is first asked for.

    Examples
    --------
    >>> import pandas as pd
    >>> import labkit as lk
    >>> servers = pd.DataFrame({"server": ["north", "east", "south"], "capacity": [10, 10, 40]})
    >>> choices = pd.DataFrame(
    ...     {"option_1": ["north", "east"], "option_2": ["east", "south"], "demand": [18, 12]}
    ... )
    >>> around = lk.explore(lk.Fleet(servers, choices), select="south")
    >>> around.fleet
    Fleet(3 servers, 2 choices of 2 options, capacity 10 to 40, demand 12 to 18)
    >>> around.selected, around.drawn
    ('south', ['north', 'east', 'south'])
    >>> around.loads[["rule", "load", "utilisation"]].values.tolist()
    [['fair split', 12.0, 0.3]]
    >>> around.neighbours[["server", "shared", "fair split"]].values.tolist()
    [['east', 12.0, 0.9]]
    >>> type(around.widget).__name__
    'VBox'
    """

    def __init__(self, state: State) -> None:
        self._state = state
        self._desk: Any = None

    @property
    def fleet(self) -> Fleet:
        """The fleet."""
        return self._state.fleet

    @property
    def selected(self) -> Any:
        """Name of the selected server, if any."""
        at = self._state.selected
        return None if at is None else self.fleet.names[at]

    @property
    def drawn(self) -> list[Any]:
        """Names of the servers that are drawn."""
        return list(self.fleet.names.take(self._state.part.servers))

    @property
    def loads(self) -> Any:
        """What is selected under each rule."""
        return self._state.loads()

    @property
    def neighbours(self) -> Any:
        """Servers that share choices with the selected one."""
        return self._state.neighbours()

    def select(self, server: Any) -> "Explorer":
        """Select a server by name.

        Parameters
        ----------
        server : str or int
            Its name in the fleet.

        Returns
        -------
        Explorer
            Itself.

        Raises
        ------
        InputError
            When no server has this name.

        Examples
        --------
        >>> import labkit as lk
        >>> around = lk.explore(lk.ladder(3))
        >>> around.select(1).selected, around.neighbours["server"].tolist()
        (1, [0, 2, 4])
        >>> around.select(6)
        Traceback (most recent call last):
            ...
        labkit.errors.InputError: no server is called 6; give the name of a server of this fleet.
        """
        moved = self._state.select(server_called(self.fleet, server))
        if self._desk is not None:
            self._desk.refresh(moved)
        return self

    def select_bottleneck(self) -> "Explorer":
        """Select the bottleneck: the largest set of servers that holds the optimum up.

        Returns
        -------
        Explorer
            Itself.

        Raises
        ------
        InputError
            When some split fills all servers alike, so that there is none.

        Examples
        --------
        Together north and east carry 18 at a capacity of 20:

        >>> import pandas as pd
        >>> import labkit as lk
        >>> servers = pd.DataFrame({"server": ["north", "east", "south"], "capacity": [10, 10, 40]})
        >>> choices = pd.DataFrame(
        ...     {"option_1": ["north", "east"], "option_2": ["east", "south"], "demand": [18, 12]}
        ... )
        >>> around = lk.explore(lk.Fleet(servers, choices)).select_bottleneck()
        >>> around.loads[["rule", "load", "utilisation"]].values.tolist()
        [['fair split', 18.0, 0.9]]
        """
        moved = self._state.select_bottleneck()
        if self._desk is not None:
            self._desk.refresh(moved)
        return self

    @property
    def widget(self) -> Any:
        """The widget (ipywidgets), made when it is first asked for."""
        if self._desk is None:
            from labkit.explorer.desk import Desk

            self._desk = Desk(self._state)
        return self._desk.box

    def __repr__(self) -> str:
        return f"<explorer: {alt_in_words(self._state)}>"

    def _repr_mimebundle_(self, **_: Any) -> dict[str, Any]:
        from labkit.explorer.sheet import page

        bundle: dict[str, Any] = {"text/plain": repr(self), "text/html": page(self._state)}
        if somebody_at_the_notebook():
            shown = self.widget._repr_mimebundle_()
            kind = "application/vnd.jupyter.widget-view+json"
            bundle[kind] = shown[kind]
        return bundle


def explore(
    fleet: Fleet,
    outcomes: Any = None,
    *,
    survey: Survey | None = None,
    select: Any = None,
    nearby: int | None = None,
) -> Explorer:
    """Look around in the choice graph of a fleet, loads under two rules side by side.

    In JupyterLab: click a server, or type its name, to see its facts, choices and neighbours; a button
    selects the bottleneck; both panels have the same places and the same colours, and move together.

    Parameters
    ----------
    fleet : Fleet
        A fleet whose choices are listed.
    outcomes : Outcome, list of Outcome or dict of str to Outcome, optional
        What `place` measured on this fleet under the rules to compare, as many tasks and replicates under
        each. Beside them stands the fair split of as much work, the best that any rule could do; alone it
        shows the fair split of the demand, placed once.
    survey : Survey, optional
        What `labkit.survey` found about this fleet, where it is at hand; default: it is made.
    select : str or int, optional
        Name of the server to begin with; default: none.
    nearby : int, optional
        Servers drawn at most, 2 to 400: of a larger fleet the nearest to the selected server, or to the
        bottleneck. Default: fleets of up to 300 servers are drawn whole, of larger ones 100 servers.

    Returns
    -------
    Explorer
        Shown when it is the last line of a cell.

    Raises
    ------
    InputError
        When the choices are not listed, outcomes are of another fleet, of different numbers of tasks or
        replicates, or called like a column of `Explorer.neighbours`, or there is no such server.

    Examples
    --------
    >>> import pandas as pd
    >>> import labkit as lk
    >>> servers = pd.DataFrame({"server": ["north", "east", "south"], "capacity": [10, 10, 40]})
    >>> choices = pd.DataFrame(
    ...     {"option_1": ["north", "east"], "option_2": ["east", "south"], "demand": [18, 12]}
    ... )
    >>> around = lk.explore(lk.Fleet(servers, choices), select="east")
    >>> around.neighbours[["server", "shared", "fair split"]].values.tolist()
    [['north', 18.0, 0.9], ['south', 12.0, 0.3]]
    """
    check_fleet(fleet)
    if fleet.implicit is not None:
        raise InputError(
            f"fleet is {fleet!r}: every server is a neighbour of every other, so there is no choice graph to "
            "look around in; give a fleet whose choices are listed."
        )
    if nearby is None:
        nearby = WHOLE if fleet.size <= WHOLE else NEARBY
    elif check_whole("nearby", nearby, least=2) > MOST:
        raise InputError(f"nearby is {nearby}; give at most {MOST}, more dots could not be told apart.")
    best = _survey_of(fleet, survey)
    explorer = Explorer(State(fleet, sides_of(fleet, outcomes, best), best, int(nearby)))
    return explorer if select is None else explorer.select(select)


def _survey_of(fleet: Fleet, given: Any) -> Survey:
    if given is None:
        return Survey(fleet)
    if not isinstance(given, Survey):
        raise InputError(
            f"survey is {type(given).__name__}; give what lk.survey(fleet) returned, or nothing."
        )
    if given.fleet is not fleet and given.fleet.digest != fleet.digest:
        raise InputError(f"survey is of another fleet, {given!r}; give lk.survey(fleet), or nothing.")
    return given
