"""`vidkin`: a filmed sprint rep in; speed, power, force and drag out, each with an interval."""
