"""What numba says about a user's rule, told in one clause that names the thing and what to do instead.

Numba's own report of a rule that it cannot compile runs over tens of lines, most of which tell how it got
there. Its wording is an implementation detail; a report that none of the patterns knows is shortened to its
first telling line.
"""

import ast
import builtins
import difflib
import inspect
import re
import textwrap
from collections.abc import Callable, Iterator
from types import FunctionType
from typing import Any

PLAIN = "use numbers, comparisons, loops and the given arrays only"
NO_MEMORY = "a rule keeps nothing from one task to the next: decide from its four arguments alone"
BY_HAND = "write it out with loops, or use a plain NumPy or math function"

# Lines of a report that tell where numba was, not what is wrong.
_AROUND = re.compile(r"^\s*(Failed in|During:|File |<source|raised from|\^|-|>>>|There are|Overload|$)")
_PLACE = re.compile(r'File "([^"]*)", line (\d+)|Raised from (\S+) \((\d+)\)')

_OPCODES = {
    "IMPORT_NAME": ("it imports something", "import it in the cell above the rule"),
    "STORE_GLOBAL": ("it sets a global name", NO_MEMORY),
    "DELETE_GLOBAL": ("it deletes a global name", NO_MEMORY),
    "STORE_DEREF": ("it sets a name that an inner function or its surroundings share", NO_MEMORY),
    "LOAD_BUILD_CLASS": ("it defines a class", PLAIN),
    "UNPACK_EX": ("it unpacks with a star", "take the values by their positions"),
}
_SIGNS = {
    "add": "+", "sub": "-", "mul": "*", "truediv": "/", "floordiv": "//", "mod": "%", "pow": "**",
    "lt": "<", "le": "<=", "gt": ">", "ge": ">=", "eq": "==", "ne": "!=",
    "iadd": "+=", "isub": "-=", "imul": "*=", "and_": "&", "or_": "|", "xor": "^",
}  # fmt: skip
_KINDS = (
    (r"Optional", "nothing on one of its paths"),
    (r"none|NoneType", "nothing"),
    (r"generator|range_iter|iter\(", "a generator"),
    (r"unicode|Literal\[str\]|str", "a text"),
    (r"(readonly )?(buffer|[Aa]rray)", "an array"),
    (r"(Uni)?Tuple", "a tuple"),
    (r"(reflected )?list|List", "a list"),
    (r"Dict", "a dict"),
    (r"(reflected )?set|Set", "a set"),
    (r"Literal\[bool\]|bool", "true or false"),
    (r"Literal\[int\]|u?int\d*", "a whole number"),
    (r"float\d*", "a number with a fraction"),
    (r"complex\d*", "a complex number"),
    (r"slice", "a slice"),
)


def reason(function: Callable, error: Exception, given: tuple[str, ...]) -> str:
    """Return why a rule cannot be compiled, and what to do: one clause each, parted by a semicolon.

    Parameters
    ----------
    function : callable
        The rule as the user wrote it.
    error : Exception
        What its compilation raised.
    given : tuple of str
        The names of the rule's arguments.
    """
    text = str(error)
    for pattern, words in _PATTERNS:
        found = re.search(pattern, text, re.DOTALL)
        if found:
            what, advice = words(found, function, given, text)
            break
    else:
        lines = [line.strip() for line in text.splitlines() if not _AROUND.match(line)]
        what, advice = (lines[0] if lines else type(error).__name__).strip(" ."), PLAIN
    return f"{what}{_line_of(function, text)}; {advice}"


def kind_in_words(kind: str) -> str:
    """Return a type as numba names it in words: "float64" is a number with a fraction."""
    for pattern, words in _KINDS:
        if re.match(pattern, kind.strip()):
            return words
    return f"a {kind.strip()}"


def outside_value(function: Callable, name: str) -> Any:
    """Return what a name means where a function was defined, or None."""
    reached = inspect.getclosurevars(function)
    for names in (reached.nonlocals, reached.globals, reached.builtins):
        if name in names:
            return names[name]
    return getattr(function, "__globals__", {}).get(name)


def written_names(function: Callable) -> set[str]:
    """Return the names whose items a function sets, as far as its text tells."""
    bases = set()
    for node in ast.walk(_tree_of(function)):
        if isinstance(node, ast.Subscript) and isinstance(node.ctx, ast.Store):
            base: ast.AST = node
            while isinstance(base, ast.Subscript):
                base = base.value
            bases |= {base.id} if isinstance(base, ast.Name) else set()
    return bases


def _tree_of(function: Callable) -> ast.AST:
    try:
        return ast.parse(textwrap.dedent(inspect.getsource(function)))
    except (OSError, TypeError, SyntaxError, ValueError):
        return ast.Module([], [])


def _line_of(function: Callable, text: str) -> str:
    """Return the line of the rule that a report names, in brackets, or nothing."""
    code = function.__code__
    try:
        lines, first = inspect.getsourcelines(function)
    except (OSError, TypeError):
        return ""
    for in_file, at_line, from_file, from_line in _PLACE.findall(text):
        row = int(at_line or from_line) - first
        # Numba shortens the path of a file.
        known = code.co_filename.endswith((in_file or from_file).lstrip("."))
        if known and 0 < row < len(lines) and not lines[row].lstrip().startswith(("def ", "@")):
            return _line_words(lines, row)
    unknown = re.search(r"name '(\w+)' is not defined", text)  # reported without its line
    for row, line in enumerate(lines):
        if unknown and re.search(rf"\b{unknown[1]}\b", line):
            return _line_words(lines, row)
    return ""


def _line_words(lines: list[str], row: int) -> str:
    shown = " ".join(lines[row].split("#")[0].split())
    return f" (line {row + 1}: {textwrap.shorten(shown, 80, placeholder=' …')})"


Words = tuple[str, str]


def _unknown_name(found: re.Match, function: Callable, given: tuple[str, ...], text: str) -> Words:
    name = found[1]
    near = difflib.get_close_matches(name, [*given, *function.__code__.co_varnames], n=1)
    advice = f"did you mean {near[0]!r}" if near else "define it in a cell above, or correct its spelling"
    return f"name {name!r} is not defined", advice


def _untyped(found: re.Match, function: Callable, given: tuple[str, ...], text: str) -> Words:
    name = found[1]
    value = outside_value(function, name)
    if name == function.__name__:
        return "it calls itself", "write a loop instead"
    if isinstance(value, FunctionType):
        if _is_users(value, function):
            advice = f"put @numba.njit above {name}, or write its lines into the rule"
            return f"it calls {name}, a plain Python function", advice
        return f"it calls {name} of the library {_library(value)}, which compiled code does not have", BY_HAND
    if hasattr(value, "choose") and hasattr(value, "prepare"):
        advice = "put the lines that both need into a function with @numba.njit above it, and call that"
        return f"it calls {name}, which is a rule itself", advice
    if callable(value):
        library = _library(value)
        own = hasattr(builtins, name) or library in ("", "builtins", "__main__")
        of = "" if own else f" of the library {library}"
        return f"it calls {name}{of}, which compiled code does not have", BY_HAND
    return _object(name, type(value).__name__ if value is not None else found[2])


def _is_users(value: FunctionType, function: Callable) -> bool:
    return value.__module__ == function.__module__ or value.__globals__ is function.__globals__


def _library(value: Any) -> str:
    module = getattr(value, "__module__", None) or type(getattr(value, "__self__", None)).__module__
    return str(module or "").split(".")[0]


def _object(name: str, kind: str) -> Words:
    if kind == "dict":
        return f"it reads {name}, a Python dict", "use numbers, or a NumPy array that positions lead into"
    if kind in ("list", "set"):
        return f"it reads {name}, a Python {kind}", f"make it a NumPy array, np.array({name}), or a tuple"
    return (
        f"it reads {name}, a Python {kind}",
        "compiled code can hold numbers, texts, tuples and NumPy arrays",
    )


def _collection(found: re.Match, function: Callable, given: tuple[str, ...], text: str) -> Words:
    kind = re.sub(r"reflected |\(.*", "", found[1])
    return _object(found[2], {"ListType": "typed list", "DictType": "typed dict"}.get(kind, kind))


def _imprecise(found: re.Match, function: Callable, given: tuple[str, ...], text: str) -> Words:
    name, kind = found[1].split(".")[0], found[2]
    words = "dict" if "ict" in kind else "set" if "set" in kind else "list"
    what = f"it makes a {words}, {name}, and nothing tells of which kind its content is"
    return what, "use numbers and the given arrays instead"


def _library_call(found: re.Match, function: Callable, given: tuple[str, ...], text: str) -> Words:
    return f"it uses {found[1]}, which compiled code does not have", BY_HAND


def _module_attribute(found: re.Match, function: Callable, given: tuple[str, ...], text: str) -> Words:
    return f"it uses {found[2]}.{found[1]}, which compiled code does not have", BY_HAND


def _missing_attribute(found: re.Match, function: Callable, given: tuple[str, ...], text: str) -> Words:
    return f"it uses {found[1]}.{found[2]}, which there is not", "correct its spelling"


def _attribute(found: re.Match, function: Callable, given: tuple[str, ...], text: str) -> Words:
    of = kind_in_words(found[2])
    return f"it uses .{found[1]} of {of}, which compiled code does not have", BY_HAND


def _arguments(found: re.Match, function: Callable, given: tuple[str, ...], text: str) -> Words:
    named = re.search(r"<(?:built-in )?function ([\w.]+)", text)
    name = named[1].split(".")[-1] if named else "a function"
    calls = f"it calls {name} with a wrong number of arguments"
    return calls, f"give it the arguments that {name} takes"


def _unpacking(found: re.Match, function: Callable, given: tuple[str, ...], text: str) -> Words:
    return "it calls a function with a wrong number of arguments", "compare each call with what it takes"


def _read_only(found: re.Match, function: Callable, given: tuple[str, ...], text: str) -> Words:
    written = written_names(function)
    outside = sorted(written - set(given) - set(function.__code__.co_varnames))
    if outside:
        return f"it writes into {outside[0]}, an array from outside", NO_MEMORY
    advice = "copy what you want to change, as in x = loads.copy(), or use numbers"
    if "quicksort" in text:
        return "it changes one of its arguments by sorting it", advice
    if not written:
        return "it changes one of its arguments, or an array from outside", advice
    return "it changes one of its arguments", advice


def _index(found: re.Match, function: Callable, given: tuple[str, ...], text: str) -> Words:
    return f"it uses {kind_in_words(found[1])} as a position", "make it a whole number, as in int(x)"


def _no_such_call(found: re.Match, function: Callable, given: tuple[str, ...], text: str) -> Words:
    name = re.split(r"[. ]", found[1])[-1].removeprefix("array_")
    inside = re.search(r">>> \w+\((.*?)\)\s*(?:\n|$)", text)
    kinds = [kind_in_words(each) for each in _split(inside[1])] if inside else []
    if name in _SIGNS and len(kinds) == 2:
        return f"it computes {kinds[0]} {_SIGNS[name]} {kinds[1]}", "use numbers on both sides"
    if re.search(r"missing a required argument|unexpected keyword|too many positional", text) or not kinds:
        return f"it calls {name} with arguments that it does not take", f"give {name} what it takes"
    return f"it calls {name} with {', '.join(kinds)}, which compiled code cannot do", BY_HAND


def _split(kinds: str) -> Iterator[str]:
    """Split at the commas outside brackets."""
    depth, begin = 0, 0
    for at, sign in enumerate(kinds):
        depth += (sign in "([<{") - (sign in ")]>}")
        if sign == "," and depth == 0:
            yield kinds[begin:at]
            begin = at + 1
    if kinds[begin:].strip():
        yield kinds[begin:]


def _return_kinds(found: re.Match, function: Callable, given: tuple[str, ...], text: str) -> Words:
    kinds = list(dict.fromkeys(kind_in_words(each) for each in _split(found[1])))
    what = f"it returns {' on one path and '.join(kinds[:2])} on another"
    return what, "return a whole number on every path, the position of the picked server within options"


def _variable_kinds(found: re.Match, function: Callable, given: tuple[str, ...], text: str) -> Words:
    name = found[3].split(".")[0]
    what = f"{name} is {kind_in_words(found[1])} on one path and {kind_in_words(found[2])} on another"
    return what, "give what is of another kind another name"


def _opcode(found: re.Match, function: Callable, given: tuple[str, ...], text: str) -> Words:
    return _OPCODES.get(found[1], (f"it uses Python that compiled code does not have ({found[1]})", PLAIN))


def _small_function(found: re.Match, function: Callable, given: tuple[str, ...], text: str) -> Words:
    return (
        "it hands on a small function (a lambda, or a loop inside a call)",
        "write a loop of its own instead",
    )


def _exception(found: re.Match, function: Callable, given: tuple[str, ...], text: str) -> Words:
    return "it keeps an exception in a name", "test before you compute instead of catching"


def _with(found: re.Match, function: Callable, given: tuple[str, ...], text: str) -> Words:
    return "it uses a with block", PLAIN


def _format(found: re.Match, function: Callable, given: tuple[str, ...], text: str) -> Words:
    return "it formats a text", PLAIN


# The first that is found in the report counts.
_PATTERNS: tuple[tuple[str, Callable[[re.Match, Callable, tuple[str, ...], str], Words]], ...] = (
    (r"name '(\w+)' is not defined", _unknown_name),
    (r"Untyped (?:global|free\w*) name '(\w+)'[^<]*<class '([^']*)'>", _untyped),
    (r"The use of an? ([^,]*?) type, assigned to variable '(\w+)' in", _collection),
    (r"Cannot infer the type of variable '([\w.]+)'[^,]*, have imprecise type: (\S+)", _imprecise),
    (r"Use of unsupported NumPy function '([\w.]+)'", _library_call),
    (r"Unknown attribute '(\w+)' of type Module\(<module '([\w.]+)'", _module_attribute),
    (r"Unknown attribute '(\w+)' of type ([^\n]*)", _attribute),
    (r"module '([\w.]+)' has no attribute '(\w+)'", _missing_attribute),
    (r"Cannot modify readonly array|run_quicksort", _read_only),
    (r"Cannot bind 'args=", _arguments),
    (r"Unsupported array index type (\w+)", _index),
    (r"Can't unify return type from the following types: ([^\n]*)", _return_kinds),
    (r"Cannot unify (.+?) and (.+?) for '([\w.$]+)'", _variable_kinds),
    (r"unsupported opcode \((\w+)\)", _opcode),
    (r"use of yield in a closure|Cannot capture the non-constant value", _small_function),
    (r"Exception object cannot be stored", _exception),
    (r"'with \(context manager\)|context manager", _with),
    (r"f-strings", _format),
    (r"No implementation of function Function\(<(?:built-in |intrinsic |ufunc )?(?:function )?"
     r"'?([\w.<> ]+?)'?(?: at 0x\w+)?>\)", _no_such_call),
    (r"values to unpack \(expected", _unpacking),
)  # fmt: skip
