"""The checked, flat, instance-expanded circuit and how text becomes one."""
