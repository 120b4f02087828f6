"""The hand analysis: device laws, bias, small signal, roles, working. No I/O, no process, no measurement."""
