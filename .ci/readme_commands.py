"""Print the shell commands of a Markdown file, one per line: every block fenced as ``sh``."""

import re
import sys
from pathlib import Path

text = Path(sys.argv[1]).read_text(encoding="utf-8")
for block in re.findall(r"^```sh\n(.*?)^```", text, flags=re.MULTILINE | re.DOTALL):
    sys.stdout.write(" ".join(block.split()) + "\n")
