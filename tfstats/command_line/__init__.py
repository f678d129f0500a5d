"""The shell commands: verbs, terminal printing, exit codes.  No arithmetic."""
