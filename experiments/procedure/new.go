package procedure

import "distal/experiments/random"

var (
	_ Procedure = (*constant)(nil)
	_ Procedure = (*staircase)(nil)
	_ Procedure = (*questPlus)(nil)
	_ Procedure = (*limits)(nil)
	_ Procedure = (*adjustment)(nil)
)

// New starts a track. The stream is used by methods that shuffle. s must have
// passed Check.
func New(s Spec, stream random.Stream) Procedure {
	switch s.Method {
	case Staircase:
		return newStaircase(s)
	case QuestPlus, Quest, Psi, PsiMarginal:
		return newQuestPlus(s)
	case Limits:
		return newLimits(s, stream)
	case Adjustment:
		return newAdjustment(s, stream)
	}
	return newConstant(s, &stream)
}
