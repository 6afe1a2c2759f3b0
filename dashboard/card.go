package dashboard

import "throatwatch/rules/card"

// cardView gives what is shown of a card: nil where none was ever loaded.
func cardView(s *card.State) *card.State {
	if !s.On() {
		return nil
	}
	shown := s.Shown(true)
	return &shown
}
