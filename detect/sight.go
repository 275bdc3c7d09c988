package detect

import "midwatch/collector"

// Hidden says in a word why the loop cannot be seen since the last frame: no
// data, suppressed, inactive, a word of a mode, or manual where that is inferred.
// Empty: the law acts and is judged. It is cheap enough for every frame.
func (w *Watch) Hidden() string {
	s := &w.s
	switch {
	case !s.Grid.Begun:
		return ""
	case s.Misc.Stale:
		return "no data"
	case s.Last.Flags&collector.Suppressed != 0:
		return "suppressed"
	case s.Last.Flags&collector.Inactive != 0:
		return "inactive"
	case s.Motion.Active:
		return ""
	case s.Motion.Mode != collector.ModeUnknown:
		return s.Motion.Mode.String()
	}
	return collector.Manual.String()
}
