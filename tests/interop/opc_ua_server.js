// An OPC UA server of node-opcua with the tags of one loop, for the link to be tested against.
//
// The first line of standard input says what to serve; each later line names a tag and is answered by what the
// address space holds there, so that no answer of the wire is checked by itself.  It ends with its standard input.
"use strict";

const path = require("path");
const readline = require("readline");
const {
    DataType, MessageSecurityMode, OPCUACertificateManager, OPCUAServer, RegisterServerMethod, SecurityPolicy,
    StatusCodes, standardUnits,
} = require("node-opcua");

const NAMESPACE = "urn:skid:juice";

async function serve(wanted) {
    const trust = new OPCUACertificateManager({ rootFolder: path.join(wanted.folder, "server-pki"), automaticallyAcceptUnknownCertificate: false });
    await trust.initialize();
    await trust.trustCertificate(require("fs").readFileSync(wanted.trusted));
    const server = new OPCUAServer({
        port: wanted.port,
        host: "127.0.0.1",
        resourcePath: "/skid",
        securityPolicies: [SecurityPolicy.None, SecurityPolicy.Basic256Sha256],
        securityModes: [MessageSecurityMode.None, MessageSecurityMode.SignAndEncrypt],
        serverCertificateManager: trust,
        userCertificateManager: trust,
        userManager: { isValidUser: (name, password) => name === wanted.user && password === wanted.password },
        registerServerMethod: RegisterServerMethod.HIDDEN,
    });
    await server.initialize();
    const nodes = addLoop(server.engine.addressSpace, wanted);
    await server.start();
    return { nodes, url: server.getEndpointUrl(), certificate: server.getCertificate().toString("hex") };
}

function addLoop(addressSpace, wanted) {
    const namespace = addressSpace.registerNamespace(NAMESPACE);
    const loop = namespace.addObject({ browseName: wanted.loop, organizedBy: addressSpace.rootFolder.objects });
    const modes = namespace.addEnumerationType({ browseName: "LoopModes", enumeration: wanted.modes });
    const nodes = {};
    for (const [name, { type, raw, range, writable }] of Object.entries(wanted.tags)) {
        const options = {
            componentOf: loop,
            browseName: name,
            nodeId: `s=${wanted.loop}.${name}`,
            dataType: name === "mode" ? modes.nodeId : type,
            accessLevel: writable ? "CurrentRead | CurrentWrite" : "CurrentRead",
            value: { dataType: DataType[type], value: raw },
        };
        nodes[name] = range
            ? namespace.addAnalogDataItem({
                ...options, engineeringUnitsRange: { low: range[0], high: range[1] }, engineeringUnits: standardUnits.degree_celsius,
            })
            : namespace.addVariable(options);
    }
    // A transmitter that has failed: a status, and no number that could be used.
    nodes.failed = namespace.addVariable({ componentOf: loop, browseName: "failed", nodeId: `s=${wanted.loop}.failed`, dataType: "Float" });
    nodes.failed.setValueFromSource({ dataType: DataType.Float, value: 0 }, StatusCodes.BadSensorFailure);
    return nodes;
}

async function main() {
    const lines = readline.createInterface({ input: process.stdin })[Symbol.asyncIterator]();
    const { nodes, ...told } = await serve(JSON.parse((await lines.next()).value));
    process.stdout.write(`${JSON.stringify(told)}\n`);
    for await (const line of lines) {
        const [name, raw] = line.split(" ");
        const variant = nodes[name].readValue().value;
        if (raw !== undefined) nodes[name].setValueFromSource({ dataType: variant.dataType, value: Number(raw) });
        process.stdout.write(`${JSON.stringify(nodes[name].readValue().value.value)}\n`);
    }
    process.exit(0);
}

main().catch((fault) => {
    process.stderr.write(`${fault.stack}\n`);
    process.exit(1);
});
