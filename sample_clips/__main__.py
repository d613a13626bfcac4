"""`python -m sample_clips`: see `remake.py`."""

import sys

from sample_clips.remake import main

if __name__ == "__main__":
    sys.exit(main())
