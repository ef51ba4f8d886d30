"""The web service around `recon`: HTTP, queue, storage, client and commands.

Open `app.py` first: it says which part answers what.
"""
