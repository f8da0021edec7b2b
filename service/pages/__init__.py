"""People look here: server-rendered pages. Nothing yet; the house keeps the room."""
