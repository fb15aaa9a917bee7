"""What every stage may use: errors with a place, exact matrices, units, files written whole, provenance, cautions.

Nothing here knows about networks. Every other stage may import this one; it imports none of them.
"""
