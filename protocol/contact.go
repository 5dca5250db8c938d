package protocol

// ContactFile is the name of the file in the data folder that tells local commands where the
// daemon is. It is there while a daemon runs, and after one was killed; a daemon that stopped in
// good order took it away.
const ContactFile = "contact.json"

// Contact is the content of the contact file. Control and Watch are the paths of the credential
// files of the two roles, relative ones from the folder of the contact file.
type Contact struct {
	URL     string `json:"url"`
	Bench   string `json:"bench"`
	Control string `json:"control"`
	Watch   string `json:"watch"`
}

// InboxPrefix is where a role receives answers. A client that acts as control may leave the
// usual "_INBOX"; one that acts as watch must set its own, so that no watcher reads what control
// is answered.
func InboxPrefix(role string) string {
	if role == WatchRole {
		return "_INBOX_watch"
	}
	return "_INBOX"
}

// The roles of the two credential files.
const (
	ControlRole = "control"
	WatchRole   = "watch"
)
