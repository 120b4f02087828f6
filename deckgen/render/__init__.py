"""From a stage to netlist text, through the template of its topology."""
