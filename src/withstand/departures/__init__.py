"""The ways the assumptions fail. Each acts on one layer of the response; a stack of them is a world.

One file a layer; `base` holds the layers and the registry, `world` composes a stack and turns shared noise into errors.
"""
