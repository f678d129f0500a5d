"""`python -m tfstats`: the command line where the script is not on the path."""

from tfstats.command_line.entry import main

if __name__ == "__main__":
    main()
