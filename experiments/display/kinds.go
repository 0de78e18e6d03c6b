package display

// Kinds lists every kind of display in the order of the documentation.
func Kinds() []*Kind {
	return []*Kind{dotsKind, walkerKind, gratingKind, plaidKind, fieldsKind, formKind, flowKind, structureKind, apparentKind, openingKind, adaptationKind, inducedKind, pursuitKind, gazeKind}
}

// FindKind finds a kind by the name used in study files, or returns nil.
func FindKind(name string) *Kind {
	for _, k := range Kinds() {
		if k.Name == name {
			return k
		}
	}
	return nil
}
