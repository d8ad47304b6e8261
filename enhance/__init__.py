"""Sharp stills and slow motion from blurred frames and events.

The map, in the order of the flow::

    read         frames and events from files -> a Recording, lazily
    calibrate    how the two sensors relate: clock, contrast thresholds, hot pixels -> rig.toml
    deblur       the event double integral, one frame or many
    interpolate  candidates carried and moved by events, and the fusion network that weighs them
    measure      PSNR, SSIM, sharpness, held-out frames re-exposed
    write        video, stills, tables
    simulate     scene, frame camera, event sensor: recordings whose truth is known
    train        fits the fusion network
    batch        many jobs: job file, checks, outcome
    clip         one recording through the rooms: the only part that knows their order
    kernels      compiled loops: event sums, the double integral, resampling

    recording.py  what flows: frames, events, a recording, a picture
    rig.py        how the two sensors relate
    rows.py       a rolling shutter seen as a global one
    view.py       where they look: the map from event pixels to frame pixels, lenses
    settings.py   what a job asks for
    clock.py      what time is
    light.py      what light is
    shipped.py    where the files that travel with the package lie
    errors.py     what can go wrong
    cli.py        the command line; the only file that prints and exits

Imports point one way: errors < clock, light, view, shipped < recording, settings < rig, rows, kernels < the rooms
(blind to each other) < clip < batch, train < cli.
"""

__version__ = "0.1.0"
