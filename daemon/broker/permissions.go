package broker

import (
	"github.com/nats-io/nats-server/v2/server"

	"gemel/protocol"
)

// Permissions are what a role may publish and subscribe to; anything else is refused. They are
// exported because whoever runs an outside server should give the same.
//
// JetStream calls are listed one by one. A pattern such as $JS.API.CONSUMER.*.STREAM would be
// shorter and would let a watcher delete another reader's consumer. Nobody but the daemon may
// publish on the subjects of the journal or on the beat.
func Permissions(bench, role string) *server.Permissions {
	stream := protocol.Stream(bench)
	publish := []string{
		protocol.DoSubject(bench, "status"),
		protocol.DoSubject(bench, "queue"),
		"$JS.API.INFO",
		"$JS.API.STREAM.INFO." + stream,
		"$JS.API.STREAM.MSG.GET." + stream,
		"$JS.API.CONSUMER.CREATE." + stream,
		"$JS.API.CONSUMER.CREATE." + stream + ".>",
		"$JS.API.CONSUMER.INFO." + stream + ".*",
		"$JS.API.CONSUMER.MSG.NEXT." + stream + ".*",
		"$JS.ACK." + stream + ".>",
		// Discovery of services, which only lists what there is.
		"$SRV.PING", "$SRV.PING.>", "$SRV.INFO", "$SRV.INFO.>", "$SRV.STATS", "$SRV.STATS.>",
	}
	if role == protocol.ControlRole {
		publish = append(publish, protocol.DoSubject(bench, "*"))
	}
	return &server.Permissions{
		Publish:   &server.SubjectPermission{Allow: publish},
		Subscribe: &server.SubjectPermission{Allow: []string{protocol.BeatSubject(bench), protocol.InboxPrefix(role) + ".>"}},
	}
}
