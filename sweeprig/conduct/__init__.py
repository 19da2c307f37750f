"""Effects: performing holds on a rig, protecting it, switching it off. The only room that moves a motor."""
