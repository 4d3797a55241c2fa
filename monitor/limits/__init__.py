"""`stepwarden limit`: from settings, options and files to the largest stable step, in words.

The numbers come from probes.limits; nothing here touches a running solver.
"""
