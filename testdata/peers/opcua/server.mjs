// Independent OPC UA peer: the invented water works "Kestrel Fen" with N control loops.
// Everything is writable on purpose, and every request is counted by service name, so that
// "the client wrote nothing" is a measurement and not a promise. See README.
import http from "node:http";
import path from "node:path";
import { parseArgs } from "node:util";
import opcua from "node-opcua";

const { OPCUAServer, OPCUACertificateManager, DataType, VariantArrayType, StatusCodes, SecurityPolicy,
  MessageSecurityMode, standardUnits } = opcua;

const { values: o } = parseArgs({ options: {
  port: { type: "string", default: "48400" },
  host: { type: "string", default: "" },               // host name announced in endpoint URLs (trap: may be unreachable)
  loops: { type: "string", default: "10" },
  rate: { type: "string", default: "1" },               // updates per second and loop of PV and OP
  "sp-every": { type: "string", default: "600" },       // seconds between set point steps
  policies: { type: "string", default: "None" },        // comma list: None,Basic256Sha256,Aes128_Sha256_RsaOaep,Aes256_Sha256_RsaPss
  modes: { type: "string", default: "" },               // comma list: None,Sign,SignAndEncrypt (default: what fits the policies)
  user: { type: "string", default: "" },                // user:password; when given, anonymous is refused
  pki: { type: "string", default: "./pki" },
  trust: { type: "string", default: "all" },            // all | list: accept any client certificate, or only trusted ones
  "shift-ns": { type: "string", default: "0" },         // register K namespaces before the plant's: its index moves
  "max-per-call": { type: "string", default: "0" },     // operation limits (0 = none announced)
  "max-browse": { type: "string", default: "0" },       // references per browse answer: forces continuation points
  "max-items": { type: "string", default: "0" },        // monitored items per session
  "skew-ms": { type: "string", default: "0" },          // shifts source timestamps
  "no-source-time": { type: "boolean", default: false },
  odd: { type: "boolean", default: false },             // adds a folder with every data type that bites
  bare: { type: "boolean", default: false },            // no EURange/EngineeringUnits: for very many loops
  history: { type: "boolean", default: false },         // keeps the last 1,000 values of PV, SP and OP
  flat: { type: "boolean", default: false },            // adds a folder of plain variables named like LIC-310.PV
  control: { type: "string", default: "0" },            // HTTP control port on loopback (0 = none)
  report: { type: "string", default: "0" },             // counts as a JSON line every R seconds
} });
const N = +o.loops, RATE = +o.rate, SKEW = +o["skew-ms"];
const PLANT = "urn:kestrel-fen:plant";

// ---- counting ---------------------------------------------------------------------------------
const counts = {};                                       // by service name
const MUTATING = ["WriteRequest", "CallRequest", "HistoryUpdateRequest", "AddNodesRequest", "AddReferencesRequest",
  "DeleteNodesRequest", "DeleteReferencesRequest"];
const snapshot = () => ({ time: new Date().toISOString(), mutating: MUTATING.reduce((s, n) => s + (counts[n] || 0), 0),
  counts, updates, sessions: server?.engine?.currentSessionCount, subscriptions: server?.engine?.currentSubscriptionCount });

// ---- server -----------------------------------------------------------------------------------
const policies = o.policies.split(",").map((p) => SecurityPolicy[p] ?? (() => { throw new Error("unknown policy " + p); })());
const modes = o.modes ? o.modes.split(",").map((m) => MessageSecurityMode[m])
  : [...(policies.includes(SecurityPolicy.None) ? [MessageSecurityMode.None] : []),
     ...(policies.some((p) => p !== SecurityPolicy.None) ? [MessageSecurityMode.Sign, MessageSecurityMode.SignAndEncrypt] : [])];
const cm = new OPCUACertificateManager({ rootFolder: path.resolve(o.pki), automaticallyAcceptUnknownCertificate: o.trust === "all" });
await cm.initialize();
const [user, password] = o.user ? o.user.split(":") : ["", ""];
const lim = +o["max-per-call"];
const server = new OPCUAServer({
  port: +o.port,
  ...(o.host ? { hostname: o.host, alternateHostname: [o.host] } : {}),
  resourcePath: "/kestrel-fen",
  serverCertificateManager: cm,
  securityPolicies: policies, securityModes: modes,
  allowAnonymous: !user,
  userManager: user ? { isValidUser: (u, p) => u === user && p === password } : undefined,
  buildInfo: { productName: "kestrel-fen-peer" },
  serverCapabilities: {
    maxBrowseContinuationPoints: 100, maxSessions: 100, maxSubscriptions: 1000, maxSubscriptionsPerSession: 500,
    maxMonitoredItems: 1000000, maxMonitoredItemsPerSubscription: 100000, maxMonitoredItemsQueueSize: 1000,
    ...(+o["max-items"] ? { maxMonitoredItems: +o["max-items"] } : {}),
    operationLimits: { maxNodesPerRead: lim, maxNodesPerBrowse: lim, maxMonitoredItemsPerCall: lim,
      maxNodesPerTranslateBrowsePathsToNodeIds: lim, maxNodesPerRegisterNodes: lim, maxNodesPerWrite: lim },
  },
});
server.on("request", (req) => { const n = req.schema.name; counts[n] = (counts[n] || 0) + 1; });
await server.initialize();

// ---- address space ----------------------------------------------------------------------------
const space = server.engine.addressSpace;
for (let k = 0; k < +o["shift-ns"]; k++) space.registerNamespace(`urn:kestrel-fen:other:${k}`);
const ns = space.registerNamespace(PLANT);
const works = ns.addFolder("ObjectsFolder", { browseName: "KestrelFen", nodeId: "s=KF" });
const AREAS = ["Intake", "Dosing", "Filtration", "Pumping", "Reservoir"], LETTERS = ["FIC", "AIC", "PIC", "LIC", "TIC"];
const areas = AREAS.map((a) => ns.addFolder(works, { browseName: a, nodeId: `s=KF.${a}` }));
const UNITS = [standardUnits.cubic_metre_per_hour, standardUnits.percent, standardUnits.bar, standardUnits.metre, standardUnits.degree_celsius];
const RANGES = [[0, 400], [0, 14], [0, 10], [0, 6], [0, 40]];
const MODES = ["Manual", "Auto", "Cascade"];
const now = () => (o["no-source-time"] ? undefined : new Date(Date.now() + SKEW));
const loops = [];
for (let i = 0; i < N; i++) {
  const a = i % AREAS.length, tag = `${LETTERS[a]}-${100 + i}`, id = `s=KF.${tag}`, [lo, hi] = RANGES[a];
  const obj = ns.addObject({ organizedBy: areas[a], browseName: tag, nodeId: id });
  const analog = (name, range, unit, v) => {
    const common = { componentOf: obj, browseName: name, nodeId: `${id}.${name}`, dataType: "Double",
      accessLevel: "CurrentRead | CurrentWrite", userAccessLevel: "CurrentRead | CurrentWrite", minimumSamplingInterval: 50 };
    const n = o.bare ? ns.addVariable(common)
      : ns.addAnalogDataItem({ ...common, engineeringUnitsRange: { low: range[0], high: range[1] }, engineeringUnits: unit });
    n.setValueFromSource({ dataType: DataType.Double, value: v }, StatusCodes.Good, now());
    return n;
  };
  const sp = lo + (hi - lo) * (0.3 + 0.4 * ((i * 7919 % 97) / 97));
  const L = { tag, lo, hi, sp, op: 50, pv: sp, state: StatusCodes.Good, frozen: false, times: [],
    PV: analog("PV", [lo, hi], UNITS[a], sp), SP: analog("SP", [lo, hi], UNITS[a], sp),
    OP: analog("OP", [0, 100], standardUnits.percent, 50) };
  const m = { componentOf: obj, browseName: "MODE", nodeId: `${id}.MODE` };
  L.MODE = o.bare ? ns.addVariable({ ...m, dataType: "Int32", value: { dataType: DataType.Int32, value: 1 } })
    : ns.addMultiStateDiscrete({ ...m, enumStrings: MODES, value: 1,
        accessLevel: "CurrentRead | CurrentWrite", userAccessLevel: "CurrentRead | CurrentWrite" });
  if (!o.bare) {
    L.GAIN = analog("GAIN", [0, 20], standardUnits.one, 0.8);
    L.RESET = analog("RESET", [0, 60], standardUnits.minute, 1.5);
  }
  if (o.history) for (const n of [L.PV, L.SP, L.OP]) space.installHistoricalDataNode(n, { maxOnlineValues: 1000 });
  loops.push(L);
}
if (o.flat) {
  const f = ns.addFolder(works, { browseName: "Flat", nodeId: "s=KF.Flat" });
  for (const name of ["LIC-310.PV", "LIC-310.SP", "LIC-310.OUT", "LIC-310.AUTO_MAN", "Tags[2]"])
    ns.addVariable({ componentOf: f, browseName: name, nodeId: `s=KF.Flat.${name}`, dataType: "Double", value: { dataType: DataType.Double, value: 7 } });
}
if (!o.bare) ns.addMethod(works, { browseName: "TripPumps", nodeId: "s=KF.TripPumps" })
  .bindMethod(async (_args, _context) => ({ statusCode: StatusCodes.Good, outputArguments: [] }));

if (o.odd) {
  const f = ns.addFolder(works, { browseName: "Odd", nodeId: "s=KF.Odd" });
  const odd = (name, dataType, value, extra = {}) => ns.addVariable({ componentOf: f, browseName: name, nodeId: `s=KF.Odd.${name}`,
    dataType, value: { dataType: DataType[dataType], arrayType: VariantArrayType.Scalar, value, ...extra }, ...(extra.arrayType ? { valueRank: 1 } : {}),
    accessLevel: "CurrentRead | CurrentWrite" });
  for (const [t, v] of [["SByte", -5], ["Byte", 200], ["Int16", -1234], ["UInt16", 54321], ["Int32", -7], ["UInt32", 7],
    ["Int64", [0, 42]], ["UInt64", [0, 42]], ["Float", 1.5], ["Double", 2.5], ["Boolean", true], ["String", "AUTO"],
    ["DateTime", new Date()], ["ByteString", Buffer.from([1, 2])]]) odd(t, t, v);
  odd("NaN", "Double", NaN); odd("Inf", "Double", Infinity);
  odd("DoubleArray", "Double", new Float64Array([1, 2, 3]), { arrayType: VariantArrayType.Array });
  odd("Int16Array", "Int16", new Int16Array([1, 2]), { arrayType: VariantArrayType.Array });
  odd("Text", "LocalizedText", { text: "Automatic", locale: "en" });
  ns.addVariable({ componentOf: f, browseName: "Range", nodeId: "s=KF.Odd.Range", dataType: "Range",
    value: { dataType: DataType.ExtensionObject, value: new opcua.Range({ low: 1, high: 9 }) } });
  const st = (name, code) => ns.addVariable({ componentOf: f, browseName: name, nodeId: `s=KF.Odd.${name}`, dataType: "Double" })
    .setValueFromSource({ dataType: DataType.Double, value: 3.5 }, code, now());
  st("Uncertain", StatusCodes.UncertainLastUsableValue); st("SensorFailure", StatusCodes.BadSensorFailure);
  st("NoComm", StatusCodes.BadNoCommunication); st("LocalOverride", StatusCodes.GoodLocalOverride);
  ns.addVariable({ componentOf: f, browseName: "Empty", nodeId: "s=KF.Odd.Empty", dataType: "Double" });
  ns.addVariable({ componentOf: f, browseName: "WriteOnly", nodeId: "s=KF.Odd.WriteOnly", dataType: "Double",
    accessLevel: "CurrentWrite", userAccessLevel: "CurrentWrite", value: { dataType: DataType.Double, value: 1 } });
  const vec = (name, t) => ns.addMultiStateValueDiscrete({ componentOf: f, browseName: name, nodeId: `s=KF.Odd.${name}`,
    dataType: t, enumValues: { Hand: 4, Automatic: 8, Remote: 16 }, value: 8 });
  vec("ModeValues", "UInt16");
}

// ---- limit on references per browse answer ------------------------------------------------------
const maxRefs = +o["max-browse"];
if (maxRefs) {
  const prev = server._on_BrowseRequest.bind(server);
  server._on_BrowseRequest = (message, channel) => {
    const r = message.request;
    if (!r.requestedMaxReferencesPerNode || r.requestedMaxReferencesPerNode > maxRefs) r.requestedMaxReferencesPerNode = maxRefs;
    return prev(message, channel);
  };
}

// ---- the plant moves ----------------------------------------------------------------------------
let updates = 0, t0 = Date.now(), frozenAll = false;
const slices = 10;                                        // spread the work over the period
let slice = 0;
function tick() {
  const s = slice++ % slices, t = (Date.now() - t0) / 1000, at = now();
  if (frozenAll) return;
  for (let i = s; i < loops.length; i += slices) {
    const L = loops[i];
    if (L.frozen) continue;
    L.pv = L.sp + (L.hi - L.lo) * (0.01 * Math.sin(t / 20 + i) + 0.002 * (Math.random() - 0.5));
    L.op = Math.min(100, Math.max(0, 50 - 20 * Math.sin(t / 20 + i + 1) + (Math.random() - 0.5)));
    L.PV.setValueFromSource({ dataType: DataType.Double, value: L.pv }, L.state, at);
    if (at && L.times.push(at.getTime()) > 10000) L.times.shift();
    L.OP.setValueFromSource({ dataType: DataType.Double, value: L.op }, StatusCodes.Good, at);
    updates += 2;
    if (Math.random() < 1 / (RATE * +o["sp-every"])) {
      L.sp = L.lo + (L.hi - L.lo) * (0.3 + 0.4 * Math.random());
      L.SP.setValueFromSource({ dataType: DataType.Double, value: L.sp }, StatusCodes.Good, at); updates++;
    }
  }
}
const timer = RATE > 0 ? setInterval(tick, 1000 / RATE / slices) : null;
if (+o.report) setInterval(() => console.log(JSON.stringify(snapshot())), +o.report * 1000);

// ---- control (tests only) -------------------------------------------------------------------------
if (+o.control) http.createServer((q, r) => {
  const u = new URL(q.url, "http://x"), p = u.searchParams, L = loops.find((x) => x.tag === p.get("loop"));
  const done = (v) => { r.setHeader("content-type", "application/json"); r.end(JSON.stringify(v) + "\n"); };
  switch (u.pathname) {
    case "/counts": return done(snapshot());
    case "/times": return done(Object.fromEntries(loops.map((l) => [l.tag, l.times])));   // when each PV was set, ms
    case "/reset": for (const k of Object.keys(counts)) delete counts[k]; updates = 0; return done({});
    case "/freeze": if (L) L.frozen = p.get("on") !== "0"; else frozenAll = p.get("on") !== "0"; return done({});
    case "/state": L.state = StatusCodes[p.get("code")]; return done({});
    case "/set": { const v = +p.get("value"); L[p.get("item")].setValueFromSource({ dataType: DataType.Double, value: v }, StatusCodes.Good, now()); return done({}); }
    case "/burst": { const n = +p.get("n"); for (let i = 0; i < n; i++) L.PV.setValueFromSource({ dataType: DataType.Double, value: i }, StatusCodes.Good, new Date(Date.now() + i)); return done({}); }
    case "/mode": L.MODE.setValueFromSource({ dataType: L.MODE.readValue().value.dataType, value: +p.get("value") }); return done({});
    case "/drop-sessions": server.engine._sessions && Object.values(server.engine._sessions).forEach((s) => server.engine.closeSession(s.authenticationToken, true, "Terminated")); return done({});
    case "/drop-subscriptions": { let n = 0; for (const s of Object.values(server.engine._sessions)) for (const sub of [...s.publishEngine.subscriptions]) { s.deleteSubscription(sub.id); n++; } return done({ n }); }
    case "/memory": return done(process.memoryUsage());
    case "/cpu": return done(process.cpuUsage());
    default: r.statusCode = 404; return done({ error: "unknown" });
  }
}).listen(+o.control, "127.0.0.1");

await server.start();
console.log(JSON.stringify({ ready: server.getEndpointUrl(), namespace: PLANT, index: ns.index, loops: N, nodes: N * (o.bare ? 4 : 6) }));
const stop = async () => { if (timer) clearInterval(timer); console.log(JSON.stringify(snapshot())); await server.shutdown(100); process.exit(0); };
process.on("SIGINT", stop); process.on("SIGTERM", stop); process.on("SIGUSR1", () => console.log(JSON.stringify(snapshot())));
