"""Tasks: what a person does at the bench with the program's help; one module a task, over the ports alone."""

from importlib import import_module

from daq.tasks.contract import Outcome, Setting, Task


def task_of(name: str) -> Task:
    """Return a task by its name."""
    found: Task = import_module(f"daq.tasks.{name.replace('-', '_')}").TASK
    return found


__all__ = ["Outcome", "Setting", "Task", "task_of"]
