"""Put the answer that the demo study really gives into README.md, and its figure beside this script.

Run by `make readme`; a test compares the block in README.md with a fresh run.
"""

import re
import shutil
from pathlib import Path

ROOT = Path(__file__).parents[1]
BLOCK = re.compile(r"(<!-- answer: [^\n]*-->\n).*?(<!-- end of answer -->)", re.DOTALL)


def block(answer: str) -> str:
    """Return the part of the printed answer that README shows: all but the ids and paths of this checkout."""
    lines = [line for line in answer.splitlines() if not line.startswith(("runs:", "page:", "records:"))]
    return "```text\n" + "\n".join(lines).strip() + "\n```\n"


def shown(readme: str) -> str:
    """Return the block that README shows now."""
    found = BLOCK.search(readme)
    assert found is not None, "README.md has no answer block"
    return found.group(0).removeprefix(found.group(1)).removesuffix(found.group(2))


def main() -> None:
    """Rewrite the block from results/answers/demo."""
    made = ROOT / "results" / "answers" / "demo"
    readme = ROOT / "README.md"
    answer = block((made / "answer.txt").read_text(encoding="utf-8"))
    text = readme.read_text(encoding="utf-8")
    readme.write_text(
        BLOCK.sub(lambda found: found.group(1) + answer + found.group(2), text), encoding="utf-8"
    )
    shutil.copyfile(made / "headroom.png", ROOT / ".readme" / "headroom.png")


if __name__ == "__main__":
    main()
