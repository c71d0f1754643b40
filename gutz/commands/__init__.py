"""The work behind each command of `gutz.cli`: one module per command, each with `run(**options) -> exit code`."""
