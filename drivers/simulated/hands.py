"""The hands at the simulated bench: whoever plays the operator, the knobs are turned in the simulated world."""

from __future__ import annotations

from drivers.roles import Operator, Prompt
from drivers.simulated.world import World

SECONDS_PER_PROMPT = 4.0
"""What reading a prompt and turning a knob takes a person; common practice is 5 to 8 s with the walk of the eye."""


class SimulatedHands:
    """An operator whose answers turn the simulated knobs; `voice` shows the prompts (and may wait for Enter)."""

    def __init__(self, voice: Operator, world: World) -> None:
        self._voice = voice
        self._world = world

    def ask(self, prompt: Prompt) -> None:
        """Show the prompt, then turn the simulated controls as it says."""
        self._voice.ask(prompt)
        self._world.advance(SECONDS_PER_PROMPT)
        for name, travel in prompt.controls.items():
            self._world.turn_control(name, travel)

    def ask_value(self, prompt: Prompt, *, unit: str, low: float, high: float) -> float:
        """Pass the question on: nobody but the voice can type."""
        return self._voice.ask_value(prompt, unit=unit, low=low, high=high)

    def tell(self, text: str) -> None:
        """Pass the remark on."""
        self._voice.tell(text)
