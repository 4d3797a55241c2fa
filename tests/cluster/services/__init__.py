"""Real services on this machine, each under a folder of its own: a Slurm of one node, an SSH server
and a file system without events.

Nothing outside that folder is written but /run/sshd, everything listens on 127.0.0.1 only, and no
service manager is needed.
"""
