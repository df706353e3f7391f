"""The works that the tests' expected values come from, as the validation table prints them.

None of them was at hand when the tests were written: all are recalled from memory, and the numbers
were computed anew from the formula named with each check.
"""

from tests.validation import MEMORY

ABAD = (
    'T. Abad et al., "Universal fidelity reduction of quantum operations from weak dissipation", '
    f"Phys. Rev. Lett. 129, 150504 (2022), {MEMORY}"
)
ABRAGAM = f"A. Abragam, The Principles of Nuclear Magnetism (1961), chapter II, {MEMORY}"
ALGEBRA = "SU(2) algebra with F_avg = (2 F_pro + 1)/3, computed from the formula"
ALLAN = (
    'D. W. Allan, "Statistics of atomic frequency standards", Proc. IEEE 54, 221 (1966); IEEE Std '
    f"1139, Allan variances of power laws, {MEMORY}"
)
ALLEN_EBERLY = (
    "L. Allen, J. H. Eberly, Optical Resonance and Two-Level Atoms (1975), area of a pulse, "
    f"{MEMORY}"
)
BLISS = (
    'C. I. Bliss, "The calculation of the dosage-mortality curve", Ann. Appl. Biol. 22, 134 '
    "(1935), data; probit line in A. J. Dobson, An Introduction to Generalized Linear Models, "
    f"{MEMORY}"
)
BLANES = (
    'S. Blanes, F. Casas, J. Ros, "Improved high order integrators based on the Magnus expansion", '
    f"BIT 40, 434 (2000), method of sixth order, {MEMORY}"
)
BLOCH = f'F. Bloch, "Nuclear induction", Phys. Rev. 70, 460 (1946), {MEMORY}'
BLOCH_SIEGERT = (
    'F. Bloch, A. Siegert, "Magnetic resonance for nonrotating fields", Phys. Rev. 57, 522 (1940); '
    'J. H. Shirley, "Solution of the Schroedinger equation with a Hamiltonian periodic in time", '
    f"Phys. Rev. 138, B979 (1965), {MEMORY}"
)
BOSMA = (
    'H. Bosma, "On the theory of linear noisy systems", Philips Res. Rep. Suppl. 10 (1967), noise '
    f"waves of a passive multiport, {MEMORY}"
)
CIRCUITS = "circuit theory, computed from the formula"
CUMMINS = (
    'S. Wimperis, "Broadband, narrowband, and passband composite pulses for use in advanced NMR '
    'experiments", J. Magn. Reson. A 109, 221 (1994); H. K. Cummins, G. Llewellyn, J. A. Jones, '
    '"Tackling systematic errors in quantum logic gates with composite rotations", Phys. Rev. A '
    f"67, 042308 (2003), {MEMORY}"
)
EQUIPARTITION = "equipartition theorem, computed from the formula"
FILTER_AREA = "linear filter and area theorem, computed from the formula"
FRIIS = f'H. T. Friis, "Noise figures of radio receivers", Proc. IRE 32, 419 (1944), {MEMORY}'
GAUSSIAN_INTEGRAL = "Gaussian integral, computed from the formula"
GLAUBER = (
    'R. J. Glauber, "Coherent and incoherent states of the radiation field", Phys. Rev. 131, 2766 '
    f"(1963), {MEMORY}"
)
HANSON = (
    'R. Hanson et al., "Spins in few-electron quantum dots", Rev. Mod. Phys. 79, 1217 (2007), '
    f"section on T2*, {MEMORY}"
)
HORODECKI_NIELSEN = (
    'M. Horodecki, P. Horodecki, R. Horodecki, "General teleportation channel, singlet fraction, '
    'and quasidistillation", Phys. Rev. A 60, 1888 (1999); M. A. Nielsen, "A simple formula for '
    'the average gate fidelity of a quantum dynamical operation", Phys. Lett. A 303, 249 (2002), '
    f"{MEMORY}"
)
ITT = (
    f"ITT, Reference Data for Radio Engineers, chapter on attenuators, {MEMORY}; computed from the "
    "formula"
)
JOHNSON_NYQUIST = (
    'J. B. Johnson, "Thermal agitation of electricity in conductors", Phys. Rev. 32, 97 (1928); '
    'H. Nyquist, "Thermal agitation of electric charge in conductors", Phys. Rev. 32, 110 (1928), '
    f"{MEMORY}"
)
KRANTZ = (
    'P. Krantz et al., "A quantum engineer\'s guide to superconducting qubits", Appl. Phys. Rev. '
    f"6, 021318 (2019), {MEMORY}"
)
LOSS = (
    'D. Loss, D. P. DiVincenzo, "Quantum computation with quantum dots", Phys. Rev. A 57, 120 '
    '(1998); T. Meunier, V. E. Calado, L. M. K. Vandersypen, "Efficient controlled-phase gate for '
    'single-spin qubits in quantum dots", Phys. Rev. B 83, 121403 (2011), '
    f"{MEMORY}"
)
MAGESAN = (
    'E. Magesan, J. M. Gambetta, J. Emerson, "Scalable and robust randomized benchmarking of '
    f'quantum processes", Phys. Rev. Lett. 106, 180504 (2011), r = (d - 1)(1 - p)/d, {MEMORY}'
)
MIXER = "mixer algebra, computed from the formula"
MOTZOI = (
    'F. Motzoi, J. M. Gambetta, P. Rebentrost, F. K. Wilhelm, "Simple pulses for elimination of '
    f'leakage in weakly nonlinear qubits", Phys. Rev. Lett. 103, 110501 (2009), {MEMORY}'
)
NAGEL = (
    'L. W. Nagel, "SPICE2: a computer program to simulate semiconductor circuits", UCB/ERL M520 '
    f"(1975), trapezoidal rule: tan(w_num h/2) = w h/2, {MEMORY}"
)
PAUL = (
    "C. R. Paul, Introduction to Electromagnetic Compatibility, chapter on signal spectra, "
    f"spectrum of a trapezoid, {MEMORY}"
)
PEDERSEN = (
    'L. H. Pedersen, N. M. Moller, K. Molmer, "Fidelity of quantum operations", Phys. Lett. A 367, '
    f"47 (2007), {MEMORY}"
)
PELGROM = (
    'M. J. M. Pelgrom, A. C. J. Duinmaijer, A. P. G. Welbers, "Matching properties of MOS '
    f'transistors", IEEE J. Solid-State Circuits 24, 1433 (1989), {MEMORY}'
)
POZAR = f"D. M. Pozar, Microwave Engineering, {MEMORY}"
RABI = (
    'I. I. Rabi, "Space quantization in a gyrating magnetic field", Phys. Rev. 51, 652 (1937), '
    f"{MEMORY}"
)
RAMSEY = (
    'N. F. Ramsey, "A molecular beam resonance method with separated oscillating fields", Phys. '
    f"Rev. 78, 695 (1950), transition probability with two separated fields, {MEMORY}"
)
RAZAVI = f"B. Razavi, RF Microelectronics, section on image-reject receivers, {MEMORY}"
RAZAVI_COMPRESSION = (
    "B. Razavi, RF Microelectronics, gain compression of a third-order nonlinearity, "
    f"{MEMORY}; computed from the formula"
)
RAZAVI_MIXER = (
    "B. Razavi, RF Microelectronics, conversion gain (2/pi) gm R of a commutating mixer, "
    f"{MEMORY}; computed from the formula"
)
RICHARDSON = (
    'L. F. Richardson, "The approximate arithmetical solution by finite differences of physical '
    f'problems", Phil. Trans. R. Soc. A 210, 307 (1911), {MEMORY}'
)
RIGETTI = (
    'C. Rigetti, M. Devoret, "Fully microwave-tunable universal gates in superconducting qubits '
    'with linear couplings and fixed transition frequencies", Phys. Rev. B 81, 134507 (2010), '
    f"{MEMORY}"
)
RUSS = (
    'M. Russ et al., "High-fidelity quantum gates in Si/SiGe double quantum dots", Phys. Rev. B '
    f"97, 085421 (2018), {MEMORY}"
)
ROTATING_FRAME = "algebra of the rotating frame, |0> the ground state, computed from the formula"
SCHOTTKY = (
    'W. Schottky, "Ueber spontane Stromschwankungen in verschiedenen Elektrizitaetsleitern", Ann. '
    f"Phys. 362, 541 (1918), 2 q I, {MEMORY}"
)
SCHNEIDER = (
    'A. Schneider et al., "Local sensing with the multilevel ac Stark effect", Phys. Rev. A 97, '
    f"062334 (2018), second-order perturbation theory, {MEMORY}"
)
SCIKIT_RF = "cascade of two-ports in scikit-rf"
STRAUCH = (
    'F. W. Strauch et al., "Quantum logic gates for coupled superconducting phase qubits", Phys. '
    f"Rev. Lett. 91, 167005 (2003), {MEMORY}"
)
THEIS = (
    'L. S. Theis et al., "Counteracting systems of diabaticities using DRAG controls: the status '
    f'after 10 years", EPL 123, 60001 (2018), second-order perturbation theory, {MEMORY}'
)
VAN_DER_ZIEL = (
    'A. van der Ziel, "Thermal noise in field-effect transistors", Proc. IRE 50, 1808 (1962), '
    f"4 k T (2/3) gm of a long channel in saturation, {MEMORY}"
)
WALLMAN = (
    'J. Wallman, C. Granade, R. Harper, S. T. Flammia, "Estimating the coherence of noise", New J. '
    f"Phys. 17, 113020 (2015), {MEMORY}"
)
WALLMAN_FLAMMIA = (
    'J. J. Wallman, S. T. Flammia, "Randomized benchmarking with confidence", New J. Phys. 16, '
    f"103032 (2014), {MEMORY}"
)
WOOD = (
    'C. J. Wood, J. M. Gambetta, "Quantification and characterization of leakage errors", Phys. '
    f"Rev. A 97, 032306 (2018), {MEMORY}"
)
ZENER = (
    'C. Zener, "Non-adiabatic crossing of energy levels", Proc. R. Soc. A 137, 696 (1932), '
    f"{MEMORY}"
)
ZVEREV = (
    f"A. I. Zverev, Handbook of Filter Synthesis, {MEMORY}; overshoot of the step response "
    "computed from the poles"
)
CLOPPER_PEARSON = (
    'C. J. Clopper, E. S. Pearson, "The use of confidence or fiducial limits illustrated in the '
    f'case of the binomial", Biometrika 26, 404 (1934), {MEMORY}'
)
NEWCOMBE = (
    'R. G. Newcombe, "Two-sided confidence intervals for the single proportion: comparison of '
    f'seven methods", Statist. Med. 17, 857 (1998), table I, {MEMORY}'
)
SPEARMAN = (
    'C. Spearman, "The proof and measurement of association between two things", Am. J. Psychol. '
    f"15, 72 (1904), {MEMORY}"
)
WILSON = (
    'E. B. Wilson, "Probable inference, the law of succession, and statistical inference", J. Am. '
    f"Stat. Assoc. 22, 209 (1927), {MEMORY}"
)
LINEAR_MODEL = "variances of independent numbers add, computed from the formula"
BALL = (
    'H. Ball, W. D. Oliver, M. J. Biercuk, "The role of master clock stability in quantum '
    f'information processing", npj Quantum Inf. 2, 16033 (2016), {MEMORY}'
)
CALLEN_WELTON = (
    'H. B. Callen, T. A. Welton, "Irreversibility and generalized noise", Phys. Rev. 83, 34 '
    f"(1951), {MEMORY}"
)
CYWINSKI = (
    'L. Cywinski, R. M. Lutchyn, C. P. Nave, S. Das Sarma, "How to enhance dephasing time in '
    f'superconducting qubits", Phys. Rev. B 77, 174509 (2008), {MEMORY}'
)
GOLDEN_RULE = (
    'R. J. Schoelkopf et al., "Qubits as spectrometers of quantum noise" (2003), golden rule for '
    f"classical noise, {MEMORY}"
)
GRAY = (
    "P. R. Gray et al., Analysis and Design of Analog Integrated Circuits, the emitter-coupled "
    f"pair, {MEMORY}; computed from the formula"
)
GREEN = (
    'T. J. Green, J. Sastrawan, H. Uys, M. J. Biercuk, "Arbitrary quantum control of qubits in the '
    f'presence of universal noise", New J. Phys. 15, 095004 (2013), {MEMORY}'
)
IEEE_1139 = f"IEEE Std 1139, definition of L(f), {MEMORY}; computed from the formula"
ITHIER = (
    'G. Ithier et al., "Decoherence in a superconducting quantum bit circuit", Phys. Rev. B 72, '
    f"134519 (2005), {MEMORY}"
)
KLAUDER_ANDERSON = (
    'J. R. Klauder, P. W. Anderson, "Spectral diffusion decay in spin resonance experiments", '
    f"Phys. Rev. 125, 912 (1962), {MEMORY}"
)
LINDBLAD_WHITE = "white noise as a Lindblad operator, computed from the formula"
PALADINO = (
    'E. Paladino et al., "1/f noise: implications for solid-state quantum information", Rev. Mod. '
    f"Phys. 86, 361 (2014), {MEMORY}"
)
PLANCK = f"M. Planck's law of the mean energy of a mode, {MEMORY}; computed from the formula"
SCHOTTKY = (
    'W. Schottky, "Ueber spontane Stromschwankungen in verschiedenen Elektrizitaetsleitern", Ann. '
    f"Phys. 362, 541 (1918), {MEMORY}"
)
WIENER_KHINCHIN = "theorem of Wiener and Khinchin, chi-square law of the periodogram"
BLAIS = (
    'A. Blais et al., "Cavity quantum electrodynamics for superconducting electrical circuits: an '
    f'architecture for quantum computation", Phys. Rev. A 69, 062320 (2004), {MEMORY}'
)
CAVES = (
    'C. M. Caves, "Quantum limits on noise in linear amplifiers", Phys. Rev. D 26, 1817 (1982), '
    f"{MEMORY}"
)
CLERK = (
    'A. A. Clerk et al., "Introduction to quantum noise, measurement, and amplification", Rev. '
    f"Mod. Phys. 82, 1155 (2010), {MEMORY}"
)
CODATA = "exact e and h of the SI, computed from the formula"
GAMBETTA_DEPHASING = (
    'J. Gambetta et al., "Qubit-photon interactions in a cavity: measurement-induced dephasing and '
    f'number splitting", Phys. Rev. A 74, 042318 (2006), {MEMORY}'
)
GARDINER_COLLETT = (
    'C. W. Gardiner, M. J. Collett, "Input and output in damped quantum systems", Phys. Rev. A 31, '
    f"3761 (1985), {MEMORY}"
)
HOUCK = (
    'A. A. Houck et al., "Controlling the spontaneous emission of a superconducting transmon '
    f'qubit", Phys. Rev. Lett. 101, 080502 (2008), {MEMORY}'
)
INPUT_OUTPUT = "input-output theory of a linear resonator, computed from the formula"
KOCH = (
    'J. Koch et al., "Charge-insensitive qubit design derived from the Cooper pair box", Phys. '
    f"Rev. A 76, 042319 (2007), {MEMORY}"
)
PROBST = (
    'S. Probst et al., "Efficient and robust analysis of complex scattering data under noise in '
    f'microwave resonators", Rev. Sci. Instrum. 86, 024706 (2015), {MEMORY}'
)
SETE = (
    'E. A. Sete, J. M. Martinis, A. N. Korotkov, "Quantum theory of a bandpass Purcell filter for '
    f'qubit readout", Phys. Rev. A 92, 012325 (2015), {MEMORY}'
)
WALLS_MILBURN = f"D. F. Walls, G. J. Milburn, Quantum Optics, input-output theory, {MEMORY}"
BENNETT = (
    'W. R. Bennett, "Spectra of quantized signals", Bell Syst. Tech. J. 27, 446 (1948); IEEE Std '
    f"1241, ideal signal-to-noise ratio of a converter, {MEMORY}; computed from the formula"
)
CONNORS = (
    'E. J. Connors, JJ Nelson, J. M. Nichol, "Rapid high-fidelity spin-state readout in Si/SiGe '
    'quantum dots via rf reflectometry", Phys. Rev. Applied 13, 024019 (2020), 99.9 % in 300 ns, '
    f"{MEMORY}; the rest computed from the formula"
)
GAMBETTA_PROTOCOLS = (
    'J. Gambetta, W. A. Braff, A. Wallraff, S. M. Girvin, R. J. Schoelkopf, "Protocols for optimal '
    'readout of qubits using a continuous quantum nondemolition measurement", Phys. Rev. A 76, '
    f"012325 (2007), {MEMORY}"
)
GAMBETTA_TRAJECTORY = (
    'J. Gambetta et al., "Quantum trajectory approach to circuit QED: quantum jumps and the Zeno '
    f'effect", Phys. Rev. A 77, 012112 (2008), {MEMORY}'
)
NORTH = (
    'D. O. North, "An analysis of the factors which determine signal/noise discrimination in '
    f'pulsed carrier systems", RCA report PTR-6C (1943), matched filter, {MEMORY}; computed from '
    "the formula"
)
