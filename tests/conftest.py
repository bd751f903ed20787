"""Makes the modules beside this file importable from every test."""

import signal

# A shell that starts the suite in the background has it ignore interrupts, and so would every process
# that the tests start and interrupt.
if signal.getsignal(signal.SIGINT) == signal.SIG_IGN:
    signal.signal(signal.SIGINT, signal.default_int_handler)
