"""One module per subcommand, each with a click command named ``command``; imported when called."""
