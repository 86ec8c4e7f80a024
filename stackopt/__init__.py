"""stackopt: find the multilayer shield stacks that meet an attenuation mask at least mass, cost and thickness."""
