"""What holds for every test: one thread of linear algebra, as on the command line."""

from spinfit.threads import one_thread

# Here and not in a fixture: the first test module that is imported loads numpy.
one_thread()
