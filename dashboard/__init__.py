"""What a person faces: the command line, the page, the report."""
