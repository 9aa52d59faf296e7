"""``python -m gradcheck`` is the command ``gradcheck``."""

from gradcheck.command_line import main

if __name__ == "__main__":
    main()
