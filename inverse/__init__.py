"""From behaviour to parts: assemblies of coupled oscillators that do what was asked."""
