package line

import "net"

// tcpPort is a TCP connection.
type tcpPort struct{ *net.TCPConn }
