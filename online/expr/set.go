package expr

// few is the length up to which a list is searched, not hashed.
const few = 8

// A textSet is a list of texts that is asked what it holds.
type textSet struct {
	list   []string
	hashed map[string]struct{}
}

func textSetOf(list []string) textSet {
	if len(list) <= few {
		return textSet{list: list}
	}
	hashed := make(map[string]struct{}, len(list))
	for _, v := range list {
		hashed[v] = struct{}{}
	}
	return textSet{hashed: hashed}
}

func (s textSet) has(text []byte) bool {
	for _, v := range s.list {
		if v == string(text) {
			return true
		}
	}
	_, ok := s.hashed[string(text)]
	return ok
}
