"""The local page on which a person checks a run outlet by outlet and corrects it.

`session` holds what the person did and what follows from it, `joints` moves the points where the flow regime changes,
`journal` keeps every step on disk until it is saved, `drawing` makes the pictures, and `server` puts it all before one
person on this machine.
"""
