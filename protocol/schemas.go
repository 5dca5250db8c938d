package protocol

import (
	"embed"
	"io/fs"
)

//go:embed asyncapi.yaml schemas/*.json
var contract embed.FS

// Contract is the written form of this package: asyncapi.yaml, and a JSON Schema for each message
// under schemas/. The schemas are 2020-12 and use only what means the same in draft-07, which
// AsyncAPI tools understand.
func Contract() fs.FS { return contract }
