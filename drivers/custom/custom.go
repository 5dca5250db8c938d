// Package custom speaks whatever language the user declares.
package custom

import (
	"errors"

	"gemel/drivers"
	"gemel/drivers/line"
)

var errNotYet = errors.New("not built yet")

type (
	Stage   struct{ drivers.Stage }
	Counter struct{ drivers.Counter }
	Shutter struct{ drivers.Shutter }
	Sensor  struct{ drivers.Sensor }
	Setting struct{ drivers.Setting }
)

func NewStage(l *line.Line, c StageConfig) (*Stage, error)       { return nil, errNotYet }
func NewCounter(l *line.Line, c CounterConfig) (*Counter, error) { return nil, errNotYet }
func NewShutter(l *line.Line, c ShutterConfig) (*Shutter, error) { return nil, errNotYet }
func NewSensor(l *line.Line, c SensorConfig) (*Sensor, error)    { return nil, errNotYet }
func NewSetting(l *line.Line, c SettingConfig) (*Setting, error) { return nil, errNotYet }
