"""The command line: a module for each command, entered in `modepair.runner.cli.app`."""
