"""Who does the work: this process, processes of this machine, or a cluster, and how tasks are shared out."""
