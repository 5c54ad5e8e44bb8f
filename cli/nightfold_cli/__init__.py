"""The command line of nightfold: one file a command, `render` alone knows rich."""
