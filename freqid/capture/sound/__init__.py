"""How does a profile reach the rig through a sound interface, and both channels the disk, whatever happens?

    stages/capture ─► session ─► stream_link ──pipe──► stream_process ─► transfer ─► SoundInterface ─► rig
                         │ journal ◄───────blocks──────────┘                        (PortAudio or simulated)
                         ▼
                      folding ─► verification, runs/NAME.h5        recovery: the same from a journal left behind

The stream lives in a process of its own that can always be killed; the recording process owns the files. What was
sent and what came in go block by block into an append-only journal, which is folded into the run when all is over.
"""
