"""python -m cohort"""

from cohort.cli import main

if __name__ == "__main__":
    raise SystemExit(main())
