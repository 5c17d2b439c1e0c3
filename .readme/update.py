"""Put what the demo study and the frozen growth table say into README.md; the figure goes beside this script.

Run by `make readme`; a test compares the blocks in README.md with a fresh run and with the frozen table.
"""

import re
import shutil
from pathlib import Path

ROOT = Path(__file__).parents[1]
GROWTH = ROOT / "results" / "frozen" / "growth" / "answer.txt"
# The parts of the growth answer that README shows.
SHOWN = ("On a ", "least-loaded, stationary", "smooth-feedback, stationary")


def answer_block(answer: str) -> str:
    """Return the part of the printed answer that README shows: all but the ids and paths of this checkout."""
    lines = [line for line in answer.splitlines() if not line.startswith(("runs:", "page:", "records:"))]
    return "```text\n" + "\n".join(lines).strip() + "\n```\n"


def growth_block(answer: str) -> str:
    """Return the paragraphs of the growth answer that README shows."""
    return (
        "```text\n" + "\n\n".join(p for p in answer.split("\n\n") if p.startswith(SHOWN)).strip() + "\n```\n"
    )


def pattern(name: str) -> re.Pattern:
    """Return what finds a block of README between its two marks."""
    return re.compile(rf"(<!-- {name}: [^\n]*-->\n)(.*?)(<!-- end of {name} -->)", re.DOTALL)


def shown(readme: str, name: str) -> str:
    """Return the block that README shows now."""
    found = pattern(name).search(readme)
    assert found is not None, f"README.md has no block {name}"
    return found.group(2)


def main() -> None:
    """Rewrite the blocks from results/answers/demo and results/frozen/growth."""
    made = ROOT / "results" / "answers" / "demo"
    readme = ROOT / "README.md"
    text = readme.read_text(encoding="utf-8")
    blocks = {
        "answer": answer_block((made / "answer.txt").read_text(encoding="utf-8")),
        "growth": growth_block(GROWTH.read_text(encoding="utf-8")),
    }
    for name, block in blocks.items():
        text = pattern(name).sub(lambda found, block=block: found.group(1) + block + found.group(3), text)
    readme.write_text(text, encoding="utf-8")
    shutil.copyfile(made / "headroom.png", ROOT / ".readme" / "headroom.png")


if __name__ == "__main__":
    main()
