"""``python -m agent`` is the command ``throwline``."""

from agent.cli import main

if __name__ == "__main__":
    main()
