"""`python -m restore` is the command `oncewhere`."""

from restore.commands import main

if __name__ == "__main__":
    main()
