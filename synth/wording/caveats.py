"""What is said with every result, whatever it is."""

HARDWARE = (
    "A model is not the machine: check sign, units and direction, limit the first trials, keep an emergency "
    "stop, follow local codes and a licensed engineer's word. No result here is a release to service."
)
