package admitv1

// Needs `npm --prefix .ci ci` once, which brings buf; the plug-ins are pinned in .ci/tools.mod.

//go:generate sh -c "cd ../../.. && .ci/node_modules/.bin/buf generate api --template api/buf.gen.yaml"
