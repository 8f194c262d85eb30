"""The rig link: the only room that talks to a rig."""
