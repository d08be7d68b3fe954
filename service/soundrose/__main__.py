"""process: `python -m soundrose`; a child of a running service does not load the command line."""

import sys

if __name__ == "__main__":
    if len(sys.argv) == 3 and sys.argv[1] == "child":
        from soundrose.worker import run_child

        sys.exit(run_child(int(sys.argv[2])))
    from soundrose.cli import main

    main()
