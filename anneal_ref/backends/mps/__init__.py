"""Matrix product states: time evolution with a settable bond dimension, on any graph."""
