// An OPC UA client of node-opcua that looks at the soft plant; it prints what it saw as one JSON object.
//
// Standard input says where the plant is and as whom to come: {url, folder, user, password, tag}.
"use strict";

const path = require("path");
const {
    AttributeIds, ClientMonitoredItem, ClientSubscription, DataType, MessageSecurityMode, OPCUACertificateManager,
    OPCUAClient, SecurityPolicy, TimestampsToReturn, UserTokenType, coerceNodeId, makeBrowsePath,
} = require("node-opcua");

const SAMPLES = 3;

async function connect(wanted, security) {
    const client = OPCUAClient.create({
        ...security,
        endpointMustExist: false,
        connectionStrategy: { maxRetry: 0 },
        clientCertificateManager: new OPCUACertificateManager({
            rootFolder: path.join(wanted.folder, "client-pki"), automaticallyAcceptUnknownCertificate: true,
        }),
    });
    await client.connect(wanted.url);
    return client;
}

const secured = { securityMode: MessageSecurityMode.SignAndEncrypt, securityPolicy: SecurityPolicy.Basic256Sha256 };
const person = (userName, password) => ({ type: UserTokenType.UserName, userName, password });
const nodeOf = (wanted, name) => `${wanted.loop}.${name}`;

async function readAll(session, wanted, names) {
    const read = {};
    for (const name of names) {
        const answer = await session.read({ nodeId: nodeOf(wanted, name), attributeId: AttributeIds.Value });
        read[name] = { type: DataType[answer.value.dataType], raw: answer.value.value, status: answer.statusCode.name };
    }
    return read;
}

async function range(session, wanted, name) {
    const found = await session.translateBrowsePath(makeBrowsePath(coerceNodeId(nodeOf(wanted, name)), ".EURange"));
    const answer = await session.read({ nodeId: found.targets[0].targetId, attributeId: AttributeIds.Value });
    return [answer.value.value.low, answer.value.value.high];
}

async function write(session, wanted, name, type, raw) {
    const status = await session.write({
        nodeId: nodeOf(wanted, name), attributeId: AttributeIds.Value, value: { value: { dataType: DataType[type], value: raw } },
    });
    return status.name;
}

// So many different clocks of the plant as a subscription brings them.
async function subscribe(session, wanted) {
    const subscription = ClientSubscription.create(session, {
        requestedPublishingInterval: 50, requestedLifetimeCount: 1000, requestedMaxKeepAliveCount: 20, publishingEnabled: true,
    });
    const item = ClientMonitoredItem.create(
        subscription, { nodeId: nodeOf(wanted, "plc_clock_ms"), attributeId: AttributeIds.Value },
        { samplingInterval: 20, discardOldest: true, queueSize: 10 }, TimestampsToReturn.Both,
    );
    const clocks = [];
    await new Promise((enough) => item.on("changed", (answer) => {
        if (answer.value.value !== null) clocks.push(answer.value.value);
        if (clocks.length === SAMPLES) enough();
    }));
    await subscription.terminate();
    return clocks;
}

async function refusal(attempt) {
    try {
        await attempt();
        return "";
    } catch (fault) {
        return fault.message;
    }
}

async function main() {
    const wanted = JSON.parse(require("fs").readFileSync(0, "utf-8"));
    const client = await connect(wanted, secured);
    const told = { wrong_password: await refusal(() => client.createSession(person(wanted.user, "not the password"))) };
    const session = await client.createSession(person(wanted.user, wanted.password));
    told.browsed = (await session.browse(wanted.loop)).references.map((one) => one.browseName.name);
    told.read = await readAll(session, wanted, ["pv", "sp", "op", "mode", "gain", "boot_count", "holder"]);
    told.range = await range(session, wanted, "pv");
    told.written = {
        gain: await write(session, wanted, "gain", "Float", 2.25),
        sp: await write(session, wanted, "sp", "Float", 61.5),
        gain_as_double: await write(session, wanted, "gain", "Double", 3.5),
        pv: await write(session, wanted, "pv", "Float", 1.0),
    };
    told.clocks = await subscribe(session, wanted);
    await session.close();
    await client.disconnect();
    told.without_security = await refusal(async () => {
        const bare = await connect(wanted, { securityMode: MessageSecurityMode.None, securityPolicy: SecurityPolicy.None });
        try {
            await bare.createSession();
        } finally {
            await bare.disconnect();
        }
    });
    process.stdout.write(`${JSON.stringify(told)}\n`);
    process.exit(0);
}

main().catch((fault) => {
    process.stderr.write(`${fault.stack}\n`);
    process.exit(1);
});
