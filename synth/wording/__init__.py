"""How numbers and names read, the same in a sentence, in a record and on a screen."""
