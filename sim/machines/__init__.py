"""A cluster of laptops: keys, what a machine says of itself, handing out tasks, the link, and the processes."""
