import sys

from pydemap.cli import main

sys.exit(main())
