"""`python -m change_assess` is the command `change-assess`."""

from change_assess.cli import main

if __name__ == "__main__":
    main()
