"""The work behind the commands of `gutz.cli`: a module for each, with `run(**options) -> exit code`."""
