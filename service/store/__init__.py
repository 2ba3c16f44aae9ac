"""Tables, the one transaction scope, queries, the queue's transport and the JSON form of core's dataclasses."""
