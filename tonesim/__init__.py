"""tonesim: hear a small solid-state guitar amplifier's output stage before it is built.

The modules, in the order in which one may import another (never the other way round):

- `tonesim.errors`: what a user can mend, each kind with its exit code
- `tonesim.units`: quantities as builders write them, decibels, preferred values
- `tonesim.signals`: what a signal is, and test signals
- `tonesim.harmonics`: distortion, hum and residue of coherent records
- `tonesim.match`: a fair reference: what a linear stage could have made
- `tonesim.ranks`: influence told by ranks
- `tonesim.pool`: work spread over threads
- `tonesim.kernel`: compiled numerical core: devices, halves, driver, rails, load, filters, front
- `tonesim.record`: tables of a file as frozen models, errors as sentences
- `tonesim.catalogue`: parts, their laws and the part files
- `tonesim.measured`: measured static curves, read and judged
- `tonesim.design`: what a design is: sections, keys, units
- `tonesim.staticlaw`: from a measured curve to the law of each half
- `tonesim.readings`: a builder's measured figures, read
- `tonesim.limits`: what its parts can bear
- `tonesim.thermal`: junction temperatures, heat sinks, thermal runaway
- `tonesim.designfile`: design files and presets to a checked `Design`, and back
- `tonesim.circuit`: a design to bare numbers
- `tonesim.tolerance`: which values of parts differ from build to build, and one such build
- `tonesim.loop`: a feedback loop in small signals: op-amp poles, linear networks
- `tonesim.margins`: margins, poles and verdict of a loop
- `tonesim.curve`: transfer surfaces, idle point, clip levels
- `tonesim.windows`: what parts come with, each spread as a change of a design
- `tonesim.explanation`: the tolerance at which a computed figure meets a measured one
- `tonesim.front`: gain stage, tone network and volume in numbers
- `tonesim.smallsignal`: the stage around an operating point, with the charge of its devices
- `tonesim.stage`: a design made ready to run
- `tonesim.twin`: the stage without its dead zone, and without any distortion
- `tonesim.check`: a stage at rest in the figures of the bench
- `tonesim.probe`: the stage at its internal rate with probes on its nodes
- `tonesim.bench`: a design on the bench, and what the meters read with a sine
- `tonesim.idle`: idle currents over temperature, trim of the offset, margin to runaway
- `tonesim.response`: gain and bandwidth
- `tonesim.power`: power, rails and heat
- `tonesim.distortion`: distortion against level and frequency, and with two tones
- `tonesim.transient`: square wave and power-up
- `tonesim.variants`: a design with one tolerance moved, and what its meters read then
- `tonesim.against`: measured figures beside computed ones, explained
- `tonesim.heat`: heat sinks, and whether idle settles on them
- `tonesim.paper`: settings, looks, axes and files of pictures
- `tonesim.pictures`: curves and courses that pictures show and no sheet keeps
- `tonesim.plot_sines`: pictures of sines
- `tonesim.plot`: pictures of a design on the bench
- `tonesim.figures`: a few figures of one build, fast
- `tonesim.spread`: many builds from parts within their tolerances
- `tonesim.stability`: how near the loop of a design is to oscillation; output impedance
- `tonesim.oversample`: up to the internal rate and down again
- `tonesim.processor`: the stage as a processor of blocks, `Amplifier`
- `tonesim.wav`: recordings in, results out
- `tonesim.level`: loudness, peak, gain
- `tonesim.cabinet`: the cabinet as a filter
- `tonesim.exposure`: how long a sound level may be listened to
- `tonesim.ear`: scales, weightings, calibration and bands of the ear
- `tonesim.framing`: recordings at any rate to frames at 48 kHz
- `tonesim.nmr`: noise-to-mask ratio, the strict model of the ear
- `tonesim.roex`: excitation ratio with level-dependent filters, the lenient one
- `tonesim.masking`: reference and test through both models, frame by frame
- `tonesim.verdict`: inaudible, borderline or audible, and by how much
- `tonesim.audibility`: the verdict on a recording and where it shows
- `tonesim.playback`: at which playback level the verdict turns
- `tonesim.report`: what a render is asked for and tells, and where its files may go
- `tonesim.render`: a recording through a design into a file
- `tonesim.demo`: the shipped recordings through three presets, and what to listen for
- `tonesim.audition`: a recording through a design and its twins, heard
- `tonesim.settle`: the least bias that hides the crossover
- `tonesim.hearing`: what an audition or a ladder found, as tables
- `tonesim.show`: text on the terminal
- `tonesim.showspread`: the spread of many builds on the terminal
- `tonesim.command`: what every command shares
- `tonesim.clibench`, `tonesim.cliaudible`: commands of the bench and of the ear
- `tonesim.cli`: the command line

Nothing is imported here, so that the command line answers at once.
"""

__version__ = "0.1.0"
