"""``python -m vliwsim``: the command line."""

from vliwsim.faces.main import main

if __name__ == "__main__":
    main()
