"""Runs the shell commands of README.md as they are shown, in the checkout."""

import argparse
import pathlib
import re
import shutil
import subprocess
import sys

ROOT = pathlib.Path(__file__).resolve().parent.parent


def main():
    parser = argparse.ArgumentParser(description=__doc__)
    parser.add_argument("--already", action="append", default=[], metavar="COMMAND",
                        help="a command that was run before and need not be run again")
    arguments = parser.parse_args()
    readme = ROOT / "README.md"
    if not readme.exists():
        print("no README.md: no commands to run")
        return 0
    blocks = re.findall(r"^```sh\n(.*?)^```$", readme.read_text(encoding="utf-8"),
                        re.MULTILINE | re.DOTALL)
    if not blocks:
        print("README.md shows no shell commands", file=sys.stderr)
        return 1
    # What an earlier run of the same commands left is not theirs to overwrite.
    for made in ROOT.glob("made*"):
        shutil.rmtree(made) if made.is_dir() else made.unlink()
    for block in (block.strip() for block in blocks):
        if block in arguments.already:
            print(f"$ {block}\n(run before)")
            continue
        print(f"$ {block}", flush=True)
        shell = ["bash", "-euo", "pipefail", "-c", block]
        done = subprocess.run(shell, cwd=ROOT, stdout=subprocess.PIPE, text=True)
        print("\n".join(done.stdout.splitlines()[:5]))
        if done.returncode != 0:
            print(f"README.md: ended with {done.returncode}: {block}", file=sys.stderr)
            return 1
    return 0


if __name__ == "__main__":
    sys.exit(main())
