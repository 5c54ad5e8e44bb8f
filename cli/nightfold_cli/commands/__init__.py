"""The commands: each brings HELP, EXAMPLES, add_arguments(parser) and run(args) -> exit code."""
