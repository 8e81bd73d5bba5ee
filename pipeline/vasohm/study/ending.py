"""What every command ends with: an exit status, and the caution that goes with the results."""

EXIT_OK = 0
EXIT_SOME_FAILED = 1
EXIT_REQUEST = 2  # nothing was done: the request is wrong
EXIT_INTERRUPTED = 130  # 128 + SIGINT
EXIT_TERMINATED = 143  # 128 + SIGTERM

CAUTION = (
    "For research. Results are no basis for the diagnosis or treatment of a person; local rules and licensed "
    "practice come first."
)
