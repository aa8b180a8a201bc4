"""Show ramprig's main job on this machine, from a bare Python 3.11 or newer and without any hardware.

    python3 scripts/demo.py

Makes the private environment where needed, then goes on inside it.
"""

import os
import subprocess
import sys

sys.path.insert(0, os.path.dirname(os.path.abspath(__file__)))
import environment


def story() -> int:
    """Tell the demonstration and return the exit status."""
    import demo_story  # needs the private environment

    return demo_story.story()


def go_inside(arguments: "list[str]") -> int:
    """Run this script again with the environment's Python and return its exit status."""
    python = environment.ready_or_exit()
    command = [python, os.path.abspath(__file__), *arguments]
    if os.name == "posix":  # the same process goes on, so that signals reach the demonstration itself
        os.execve(python, command, environment.clean_variables())
    return subprocess.run(command, env=environment.clean_variables(), check=False).returncode


def main(arguments: "list[str]") -> int:
    """Make the environment ready, then tell the story inside it."""
    if any(argument in ("-h", "--help") for argument in arguments):
        print(__doc__)
        return 0
    return story() if environment.inside() else go_inside(arguments)


if __name__ == "__main__":
    try:
        sys.exit(main(sys.argv[1:]))
    except KeyboardInterrupt:
        sys.exit(130)
