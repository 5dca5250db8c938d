package trouble

// Surface says how a trouble must show, so that a test can demand that none passed unseen.
type Surface struct {
	// Harmless: the trouble may pass without any trace in the journal, because the program asked
	// again, or dropped a line, and lost nothing by it. It still shows in the wire's own counts.
	Harmless bool
	// Retried: a question was repeated, or a line dropped, on the device's line.
	Retried bool
	// Events are kinds of journal events of which at least one must follow, if a run was active
	// and the trouble met it. Empty: none is demanded.
	Events []string
	// Doubts: readings taken under the trouble must not stand as accepted and undoubted.
	Doubts bool
	// Undetectable says why no instrument that a bench file can declare shows the trouble. Empty: one does,
	// where it is declared.
	Undetectable string
	// Text says the same to a person.
	Text string
}

// Surfaces says how the trouble must show.
func (t Trouble) Surfaces() Surface {
	switch t.Kind {
	case Missing:
		return Surface{Harmless: true, Retried: true, Text: "the question times out and is asked again, or its reading is set aside"}
	case Garbled:
		return Surface{Harmless: true, Retried: true, Text: "the answer is refused, or differs from the second one, and the question is asked again"}
	case Late:
		return Surface{Harmless: true, Text: "the answer is waited for, or the question is asked again and the late line dropped; it never answers another question"}
	case Duplicated:
		return Surface{Harmless: true, Text: "the second line is dropped; it never answers another question"}
	case Unasked:
		return Surface{Harmless: true, Text: "a declared line is taken for what it is declared to mean; any other makes the question be asked again"}
	case Restart:
		return Surface{Events: []string{"trouble", "held", "set_aside"}, Doubts: true, Text: "no reading is accepted on a lost zero or from a lost gate; a stage that lost its zero holds the run until it is homed"}
	case Lamp:
		return Surface{Events: []string{"set_aside", "held", "trouble"}, Doubts: true, Text: "above a declared trip rate the detector is protected and the run holds; below it, a disturbed dwell is set aside"}
	case Unplug:
		return Surface{Retried: true, Events: []string{"trouble", "held", "set_aside"}, Text: "the line is opened again and everything on it verified"}
	case Slip, LostSteps:
		return Surface{Events: []string{"doubted", "set_aside", "held", "trouble"}, Doubts: true, Text: "an encoder shows it at the next read; counted steps hide it until the zero is verified, and then readings back to the last good check are doubted"}
	case PumpDrift:
		return Surface{Events: []string{"guard_broken", "held"}, Text: "a guard on the power holds the run once the power leaves its bounds"}
	case Split:
		return Surface{Harmless: true, Text: "the rest is waited for; half an answer is none"}
	case RestartMoving:
		return Surface{Events: []string{"trouble", "held", "set_aside"}, Doubts: true, Text: "the motion ends short, the zero is lost, and the run holds until it is homed"}
	case Stall:
		return Surface{Harmless: true, Events: []string{"trouble", "taken_again", "doubted", "held", "set_aside"}, Doubts: true, Text: "an encoder shows that the axis did not arrive, and it is sent again; counted steps hide it until the zero is verified, and then readings back to the last good check are doubted"}
	case ModeHop:
		return Surface{Undetectable: "no instrument measures the pump's wavelength, and the light at one place says nothing of why it changed", Text: "where a reference is taken, its ratios or centres may leave their bounds; otherwise it is in the counts as they truly were"}
	case TemperatureDrift:
		return Surface{Events: []string{"guard_broken", "held"}, Text: "a guard on the temperature holds the run once it leaves its bounds"}
	case Gone:
		return Surface{Retried: true, Events: []string{"trouble", "held"}, Text: "the line is opened again and again, ever more rarely, and the run holds until a person has seen to it"}
	case Stranger:
		return Surface{Retried: true, Events: []string{"trouble", "held"}, Text: "the instrument says who it is before anything else is asked, and another one's answers are not used; without a declared identity nobody can know"}
	case Silent:
		return Surface{Retried: true, Events: []string{"trouble", "held", "set_aside"}, Text: "questions time out, the line is opened again, and the run goes on when the device answers or holds"}
	case DeadLine:
		return Surface{Retried: true, Events: []string{"trouble", "held"}, Text: "questions time out; a shutter that cannot be reached is said to leave the rest state unproved"}
	case Hung:
		return Surface{Retried: true, Events: []string{"trouble", "held", "set_aside"}, Text: "a write that hangs is given up after a bound, and the line is opened again"}
	case WrongGate:
		return Surface{Events: []string{"set_aside", "taken_again", "held"}, Doubts: true, Text: "the counter's status calls its gate time doubtful, or the gate ends when it should not; its reading is set aside"}
	case Overflow:
		return Surface{Events: []string{"set_aside", "taken_again", "held"}, Doubts: true, Text: "the counter's status says that a channel ran over, and the reading is set aside"}
	case Latched:
		return Surface{Events: []string{"set_aside", "held", "trouble"}, Doubts: true, Text: "below a declared floor the detector is protected and the run holds; without a floor a disturbed dwell is set aside"}
	case StuckValue:
		return Surface{Undetectable: "a sensor that says the same for ever cannot be told from one of a steady quantity", Text: "a guard on it sees nothing from then on"}
	case StuckShutter:
		return Surface{Events: []string{"trouble", "held"}, Text: "a blade sensor shows it, and the run holds; without a sensor only the light can"}
	}
	return Surface{Text: "unknown kind"}
}
