"""Tasks: what a person does at the bench with the program's help; one module a task, over the ports alone."""
