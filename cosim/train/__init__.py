"""What one pulse does to the next: trains of pulses through a netlist, and pre-distortion."""
