package online

// names numbers texts in order of first appearance, from 0.
type names struct {
	list []string
	at   map[string]int
}

func (n *names) find(b []byte) (int, bool) {
	i, ok := n.at[string(b)]
	return i, ok
}

func (n *names) add(s string) int {
	if n.at == nil {
		n.at = map[string]int{}
	}
	i := len(n.list)
	n.at[s] = i
	n.list = append(n.list, s)
	return i
}
