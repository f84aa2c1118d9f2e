"""Make the environments known to gymnasium by id; nothing of theirs is loaded before `make`."""

from gymnasium.envs.registration import register, registry

IDS = {
    "idlearn/Plant-v0": "idlearn.envs.gym:PlantEnv",
    "idlearn/Kiln-v0": "idlearn.envs.gym:KilnEnv",
}


def register_environments() -> None:
    """Register every id that is not registered yet."""
    for name, entry in IDS.items():
        if name not in registry:
            register(id=name, entry_point=entry)
