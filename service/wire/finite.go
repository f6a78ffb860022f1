package wire

import (
	"fmt"
	"math"

	"google.golang.org/protobuf/reflect/protoreflect"

	"example.com/admit/service/inspection"
)

// finite returns a fault that names the first number of a message that is not finite, however deep it lies; nil when there is none.
func finite(m protoreflect.Message) (err error) {
	m.Range(func(f protoreflect.FieldDescriptor, v protoreflect.Value) bool {
		if !f.IsList() {
			err = finiteValue(string(f.Name()), f, v)
			return err == nil
		}
		for i, list := 0, v.List(); i < list.Len() && err == nil; i++ {
			err = finiteValue(fmt.Sprintf("%s[%d]", f.Name(), i), f, list.Get(i))
		}
		return err == nil
	})
	return err
}

func finiteValue(name string, f protoreflect.FieldDescriptor, v protoreflect.Value) error {
	switch f.Kind() {
	case protoreflect.DoubleKind, protoreflect.FloatKind:
		if x := v.Float(); math.IsNaN(x) || math.IsInf(x, 0) {
			return inspection.Faultf(inspection.Malformed, name, "want a finite number, got %g", x)
		}
	case protoreflect.MessageKind:
		if err := finite(v.Message()); err != nil {
			return in(name, err)
		}
	}
	return nil
}
