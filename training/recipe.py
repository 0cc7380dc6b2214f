"""A training recipe: sizes of the network and of the loop, read from configs/training."""

import tomllib
from dataclasses import dataclass

from emu.configs import check_keys, config_text
from emu.errors import UserError
from emu.inference.flow import FlowChoices
from emu.inference.network import EmbeddingChoices, sizes
from training.loop import LoopOptions

__all__ = ["Recipe", "parse_recipe", "recipe"]


@dataclass(frozen=True)
class Recipe:
    """Hold what one TOML of configs/training says.

    Args:
        text: the TOML.
        held_out: flares kept apart, to watch the loss on.
        embedding: size of the embedding.
        flow: size of the flow; a classifier has none of it.
        loop: the training loop.
    """

    text: str
    held_out: int
    embedding: EmbeddingChoices
    flow: FlowChoices
    loop: LoopOptions

    def steps(self, minutes: float | None, steps: int | None) -> int:
        """Turn a budget into a number of steps.

        Args:
            minutes: CPU-minutes, at the recipe's steps per minute.
            steps: the number itself; one of the two must be None.

        Raises:
            UserError: both or none is given, or less than one step comes out.
        """
        if (minutes is None) == (steps is None):
            raise UserError("give either --minutes or --steps")
        count = steps if steps is not None else round((minutes or 0.0) * self.loop.steps_per_minute)
        if count < 1:
            raise UserError(f"a budget of {count} steps trains nothing; give more")
        return count


def recipe(name: str) -> Recipe:
    """Read a recipe.

    Args:
        name: of a shipped recipe, or the path of a ``.toml``.

    Raises:
        UserError: it cannot be found or read, or makes no sense.
    """
    text, where = config_text("training", name)
    return parse_recipe(text, where)


def parse_recipe(text: str, where: str) -> Recipe:
    """Build a recipe from its TOML text."""
    try:
        table = tomllib.loads(text)
    except tomllib.TOMLDecodeError as problem:
        raise UserError(f"{where}: not valid TOML: {problem}") from problem
    check_keys(table, ("held_out", "embedding", "flow", "loop"), (), where)
    held_out = table["held_out"]
    if not isinstance(held_out, int) or held_out < 1:
        raise UserError(f"{where}: held_out is {held_out!r}; give a number of flares")
    return Recipe(
        text=text,
        held_out=held_out,
        embedding=sizes(EmbeddingChoices, table["embedding"], f"{where}: [embedding]"),
        flow=sizes(FlowChoices, table["flow"], f"{where}: [flow]"),
        loop=LoopOptions.from_table(table["loop"], f"{where}: [loop]"),
    )
