"""``python -m terrain2q`` is the command line."""

from terrain2q.commands import main

if __name__ == "__main__":
    main(prog_name="terrain2q")
