"""The physics of the circuit: oil, elements, and the steady state of the whole circuit."""
