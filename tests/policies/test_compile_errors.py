"""What cannot be compiled is told in one sentence: the thing, the line, and what to do instead."""

import math
import time
from collections import deque

import numba
import numpy as np
import pandas as pd
import pytest

import labkit as lk
from labkit.policies.compile_errors import kind_in_words

RATES = {"a": 1}
SHARES = [1, 2]
THING = object()
MEMORY = np.zeros(4)
COUNT = 0


def helper(number):
    return number


@numba.njit
def pair(one, other):
    return one


@lk.policy
def another(options, loads, capacity, coin):
    return 0


def unknown(options, loads, capacity, coin):
    return laods[options[0]] > 1  # noqa: F821


def reads_dict(options, loads, capacity, coin):
    return RATES["a"]


def reads_list(options, loads, capacity, coin):
    return SHARES[0]


def reads_object(options, loads, capacity, coin):
    return 0 if THING is None else 1


def empty_list(options, loads, capacity, coin):
    _kept = []
    return 0


def empty_dict(options, loads, capacity, coin):
    _kept = {}
    return 0


def formats(options, loads, capacity, coin):
    return len(f"{coin:.2f}")


def calls_plain(options, loads, capacity, coin):
    return helper(0)


def calls_rule(options, loads, capacity, coin):
    return another(options, loads, capacity, coin)


def calls_itself(options, loads, capacity, coin):
    return calls_itself(options, loads, capacity, coin)


def calls_pandas(options, loads, capacity, coin):
    return pd.Series(loads).argmin()


def calls_clock(options, loads, capacity, coin):
    return int(time.time()) % 2


def calls_class(options, loads, capacity, coin):
    return len(deque(options))


def calls_open(options, loads, capacity, coin):
    return open("x") is None


def calls_numpy(options, loads, capacity, coin):
    return np.lexsort((loads, loads))[0]


def misspells(options, loads, capacity, coin):
    return int(math.flor(coin))


def method(options, loads, capacity, coin):
    return options.index(3)


def too_few(options, loads, capacity, coin):
    return pair(1)


def too_many(options, loads, capacity, coin):
    return len(options, loads)


def no_keyword(options, loads, capacity, coin):
    return loads.argmin(depth=1)


def adds_text(options, loads, capacity, coin):
    return 1 + "b"


def two_kinds(options, loads, capacity, coin):
    if coin > 0.5:
        return "first"
    return 0


def fraction_as_position(options, loads, capacity, coin):
    return loads[options[coin * 2]] > 1


def imports(options, loads, capacity, coin):
    import cmath

    return int(cmath.pi)


def sets_global(options, loads, capacity, coin):
    global COUNT
    COUNT = 1
    return COUNT


def writes_outside(options, loads, capacity, coin):
    MEMORY[0] += 1
    return MEMORY[0] > 3


def sorts(options, loads, capacity, coin):
    loads.sort()
    return 0


def by_lambda(options, loads, capacity, coin):
    return min(range(len(options)), key=lambda each: loads[options[each]])


def in_a_call(options, loads, capacity, coin):
    return min(loads[each] for each in options) > 1


def catches(options, loads, capacity, coin):
    try:
        picked = int(coin * 2)
    except ValueError as error:
        picked = len(str(error))
    return picked


def star(options, loads, capacity, coin):
    first, *_ = options
    return first > 0


def opens(options, loads, capacity, coin):
    with open("x") as stream:
        stream.close()
    return 0


SENTENCES = [
    (unknown, "name 'laods' is not defined (line 2: return laods[options[0]] > 1); did you mean 'loads'"),
    (reads_dict, "it reads RATES, a Python dict"),
    (reads_list, "it reads SHARES, a Python list"),
    (reads_object, "it reads THING, a Python object"),
    (empty_list, "it makes a list, _kept, and nothing tells of which kind its content is"),
    (empty_dict, "it makes a dict, _kept, and nothing tells of which kind its content is"),
    (formats, "it formats a text"),
    (calls_plain, "it calls helper, a plain Python function"),
    (calls_rule, "it calls another, which is a rule itself"),
    (calls_itself, "it calls itself"),
    (calls_pandas, "it uses pandas.Series, which compiled code does not have"),
    (calls_clock, "it uses time.time, which compiled code does not have"),
    (calls_class, "it calls deque of the library collections, which compiled code does not have"),
    (calls_open, "it calls open, which compiled code does not have"),
    (calls_numpy, "it uses numpy.lexsort, which compiled code does not have"),
    (misspells, "it uses math.flor, which there is not"),
    (method, "it uses .index of an array, which compiled code does not have"),
    (too_few, "it calls pair with a wrong number of arguments"),
    (too_many, "it calls a function with a wrong number of arguments"),
    (no_keyword, "it calls argmin with arguments that it does not take"),
    (adds_text, "it computes a whole number + a text"),
    (two_kinds, "it returns a whole number on one path and a text on another"),
    (fraction_as_position, "it uses a number with a fraction as a position"),
    (imports, "it imports something"),
    (sets_global, "it sets a global name"),
    (writes_outside, "it writes into MEMORY, an array from outside"),
    (sorts, "it changes one of its arguments by sorting it"),
    (by_lambda, "it hands on a small function"),
    (in_a_call, "it hands on a small function"),
    (catches, "it keeps an exception in a name"),
    (star, "it unpacks with a star"),
    (opens, "it uses a with block"),
]


@pytest.mark.parametrize(
    ("function", "sentence"), SENTENCES, ids=lambda value: getattr(value, "__name__", "")
)
def test_each_error_is_told_in_one_sentence(function, sentence):
    rule = lk.policy(function)
    with pytest.raises(lk.InputError) as refusal:
        rule.check(np.int64)
    told = str(refusal.value)
    assert told.startswith(f"policy {rule.name} cannot be compiled: {sentence}")
    assert "\n" not in told
    assert len(told) < 300
    assert told.count("; ") == 1
    assert not any(word in told for word in ("numba.core", "Literal", "nopython", "0x", "readonly"))


def test_the_line_is_that_of_the_decorated_rule():
    @lk.policy
    def lines(options, loads, capacity, coin):
        """Say where."""
        first = options[0]  # fine
        return RATES[first]  # not fine

    with pytest.raises(lk.InputError, match=r"\(line 5: return RATES\[first\]\)"):
        lines.check(np.int64)


def test_a_closures_value_is_named():
    inside = {"a": 1}

    @lk.policy
    def closed(options, loads, capacity, coin):
        return inside["a"]

    with pytest.raises(lk.InputError, match="it reads inside, a Python dict"):
        closed.check(np.int64)


def test_without_its_text_a_rule_that_writes_is_still_told():
    scope = {"memory": np.zeros(2)}
    exec("def quiet(options, loads, capacity, coin):\n    memory[0] += 1\n    return 0\n", scope)
    with pytest.raises(lk.InputError, match="changes one of its arguments, or an array from outside;"):
        lk.policy(scope["quiet"]).check(np.int64)


def test_a_report_that_is_not_known_keeps_its_telling_line():
    def deletes(options, loads, capacity, coin):
        del coin
        return 0 if coin else 1  # noqa: F821

    with pytest.raises(
        lk.InputError, match="cannot be compiled: Illegal IR, del found at: del coin"
    ) as refusal:
        lk.policy(deletes).check(np.int64)
    assert "\n" not in str(refusal.value)


def test_kinds_have_words():
    words = {
        "OptionalType(int64)": "nothing on one of its paths",
        "readonly array(uint32, 1d, C)": "an array",
        "Literal[int](3)": "a whole number",
        "UniTuple(int64 x 2)": "a tuple",
        "float64": "a number with a fraction",
        "Whatever": "a Whatever",
    }
    assert {kind: kind_in_words(kind) for kind in words} == words
