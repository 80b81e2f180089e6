BEGIN TRANSACTION;
CREATE TABLE baselines (
	baseline_id VARCHAR(64) NOT NULL, 
	feed TEXT NOT NULL, 
	rules_fingerprint TEXT NOT NULL, 
	learned_at TEXT NOT NULL, 
	first_stamp TEXT NOT NULL, 
	last_stamp TEXT NOT NULL, 
	fingerprint TEXT NOT NULL, 
	series BIGINT NOT NULL, 
	facts BLOB NOT NULL, 
	PRIMARY KEY (baseline_id)
);
INSERT INTO "baselines" VALUES('aa1d8ee975c2f0e86012a4d721c7490a','substation_heat','rules-1','2026-01-12T05:00:00Z','2025-10-01T00:00:00Z','2026-01-11T23:00:00Z','abc',6,X'6661637473');
CREATE TABLE batches (
	batch_id VARCHAR(255) NOT NULL, 
	feed TEXT NOT NULL, 
	fingerprint TEXT NOT NULL, 
	first_stamp TEXT, 
	last_stamp TEXT, 
	rows BIGINT NOT NULL, 
	series BIGINT NOT NULL, 
	received TEXT NOT NULL, 
	PRIMARY KEY (batch_id)
);
INSERT INTO "batches" VALUES('heat-0112-abcd','substation_heat','f-heat-0112-abcd','2026-01-12T00:00:00Z','2026-01-12T23:00:00Z',144,6,'["inbox/heat.csv"]');
INSERT INTO "batches" VALUES('heat-0113-abcd','substation_heat','f-heat-0113-abcd','2026-01-13T00:00:00Z','2026-01-13T23:00:00Z',144,6,'["inbox/heat.csv"]');
CREATE TABLE episodes (
	episode_id VARCHAR(64) NOT NULL, 
	feed TEXT NOT NULL, 
	rule TEXT NOT NULL, 
	state TEXT NOT NULL, 
	action TEXT, 
	started TEXT NOT NULL, 
	first_at TEXT NOT NULL, 
	last_at TEXT NOT NULL, 
	closed_at TEXT, 
	closed_as TEXT, 
	closed_by TEXT, 
	first_batch TEXT NOT NULL, 
	last_batch TEXT NOT NULL, 
	batches BIGINT NOT NULL, 
	series BIGINT NOT NULL, 
	widest BIGINT NOT NULL, 
	worst TEXT, 
	p_value DOUBLE, 
	beyond DOUBLE, 
	PRIMARY KEY (episode_id)
);
INSERT INTO "episodes" VALUES('a3ba8088d6df937603de3bb59514c62d','substation_heat','keeps little memory','open','note','2026-01-12T00:00:00Z','2026-01-12T23:00:00Z','2026-01-13T23:00:00Z',NULL,NULL,NULL,'heat-0112-abcd','heat-0113-abcd',2,2,2,'eaca7585b707eac78a81ddfe76289e0f',-1.88782125350749313552e-01,3.77589843105435818415e+00);
CREATE TABLE judgements (
	judgement_id VARCHAR(64) NOT NULL, 
	batch_id VARCHAR(255) NOT NULL, 
	rules_fingerprint TEXT NOT NULL, 
	baseline_id TEXT, 
	decision TEXT NOT NULL, 
	judged_at TEXT NOT NULL, 
	stored_at TEXT NOT NULL, 
	passed INTEGER NOT NULL, 
	failed INTEGER NOT NULL, 
	undecided INTEGER NOT NULL, 
	rules TEXT NOT NULL, 
	sercheck_version TEXT NOT NULL, 
	PRIMARY KEY (judgement_id), 
	FOREIGN KEY(batch_id) REFERENCES batches (batch_id)
);
INSERT INTO "judgements" VALUES('91ea34c7acd839316c7419a4acda3709','heat-0112-abcd','rules-1',NULL,'held','2026-01-13T06:00:00Z','2026-12-01T13:39:17.695157Z',3,2,1,'feed: substation_heat
','0.1.0');
INSERT INTO "judgements" VALUES('86d8e32e7e8bcdbce0bee989a69793c9','heat-0113-abcd','rules-1',NULL,'released','2026-01-13T06:00:00Z','2026-12-01T13:39:17.709422Z',3,2,1,'feed: substation_heat
','0.1.0');
CREATE TABLE messages (
	message_id VARCHAR(64) NOT NULL, 
	judgement_id VARCHAR(64) NOT NULL, 
	batch_id TEXT NOT NULL, 
	feed TEXT NOT NULL, 
	desk TEXT NOT NULL, 
	changes TEXT NOT NULL, 
	made_at TEXT NOT NULL, 
	state VARCHAR(32) NOT NULL, 
	attempts BIGINT NOT NULL, 
	next_at TEXT, 
	claimed_by TEXT, 
	claimed_at TEXT, 
	trouble TEXT, 
	sent_at TEXT, 
	PRIMARY KEY (message_id), 
	FOREIGN KEY(judgement_id) REFERENCES judgements (judgement_id)
);
CREATE TABLE migrations (
	name VARCHAR(255) NOT NULL, 
	applied_at TEXT, 
	PRIMARY KEY (name)
);
INSERT INTO "migrations" VALUES('001 batches, judgements and records','2026-12-01T13:39:17Z');
INSERT INTO "migrations" VALUES('002 baselines and settlements','2026-12-01T13:39:17Z');
INSERT INTO "migrations" VALUES('003 sketches','2026-12-01T13:39:17Z');
INSERT INTO "migrations" VALUES('004 episodes and messages','2026-12-01T13:39:17Z');
CREATE TABLE records (
	record_id VARCHAR(64) NOT NULL, 
	judgement_id VARCHAR(64) NOT NULL, 
	place BIGINT NOT NULL, 
	feed TEXT, 
	batch_id TEXT, 
	batch_fingerprint TEXT, 
	judged_at TEXT, 
	rule TEXT, 
	measure TEXT, 
	"column" TEXT, 
	series TEXT, 
	season TEXT, 
	"after" TEXT, 
	window_start TEXT, 
	window_end TEXT, 
	method TEXT, 
	assumes TEXT, 
	outcome TEXT, 
	reason TEXT, 
	action TEXT, 
	likely_cause TEXT, 
	rules_fingerprint TEXT, 
	baseline_id TEXT, 
	sercheck_version TEXT, 
	lag BIGINT, 
	n BIGINT, 
	n_missing BIGINT, 
	n_eff DOUBLE, 
	observed DOUBLE, 
	bound DOUBLE, 
	standard_error DOUBLE, 
	"limit" DOUBLE, 
	naive_limit DOUBLE, 
	detectable DOUBLE, 
	p_value DOUBLE, 
	false_alarm DOUBLE, 
	false_alarm_used DOUBLE, 
	cause_support DOUBLE, 
	PRIMARY KEY (record_id), 
	FOREIGN KEY(judgement_id) REFERENCES judgements (judgement_id)
);
INSERT INTO "records" VALUES('eaca7585b707eac78a81ddfe76289e0f','91ea34c7acd839316c7419a4acda3709',0,'substation_heat','heat-0112-abcd','f-heat-0112-abcd','2026-01-13T06:00:00Z','keeps little memory','autocorrelation','kwh','s0',NULL,NULL,'2026-01-12T00:00:00Z','2026-01-12T23:00:00Z','Bartlett (1946)',NULL,'fail','fail because of this',NULL,NULL,'rules-1',NULL,'0.1.0',1,24,0,-0.0325217049455206,-6.41470394107221397739e-01,1.2301533574825742473e-03,2.0313861038960903671e-01,-1.53013576550539354137e+00,-1.22505582641769339424e+00,1.05414248997898557513e-01,-1.88782125350749313552e-01,-1.90122273980084410816e+00,1.56751086624225155485e-01,6.0143602597438484969e-02);
INSERT INTO "records" VALUES('345302e033f3c802469ebda4e31a8f92','91ea34c7acd839316c7419a4acda3709',1,'substation_heat','heat-0112-abcd','f-heat-0112-abcd','2026-01-13T06:00:00Z','keeps little memory','autocorrelation','kwh','s1',NULL,NULL,'2026-01-12T00:00:00Z','2026-01-12T23:00:00Z','Bartlett (1946)',NULL,'pass',NULL,NULL,NULL,'rules-1',NULL,'0.1.0',1,24,0,8.84389867383173933212e-01,2.00041654634242282995e+00,2.98745537508469882759e-01,-4.6330757653841514454e-01,-4.77753276033930640576e-01,0.0761402303770081,-9.30468044708204655712e-01,0.682910267195206,-1.28953773978497610031e+00,-1.86930944629954381985e-01,1.34021524555453352967e+00);
INSERT INTO "records" VALUES('d6fdb97fdc2bf12487c8fe97ad41b9eb','91ea34c7acd839316c7419a4acda3709',2,'substation_heat','heat-0112-abcd','f-heat-0112-abcd','2026-01-13T06:00:00Z','keeps little memory','autocorrelation','kwh','s2',NULL,NULL,'2026-01-12T00:00:00Z','2026-01-12T23:00:00Z','Bartlett (1946)',NULL,'pass',NULL,NULL,NULL,'rules-1',NULL,'0.1.0',1,24,0,-0.583600432743302,7.62259712084711771318e-01,-2.74137855362217575105e-01,1.27268411225830824218e-01,-9.78519078056639513008e-01,1.35882342174153758485e+00,-2.92518224632734892554e-02,-6.65173201494155680313e-02,-1.84173503779173231009e+00,-2.51675971082051308513e+00,-4.92206518551329630373e-01);
INSERT INTO "records" VALUES('7f06f1dc6b8cefc8150dfe82a438641b','91ea34c7acd839316c7419a4acda3709',3,'substation_heat','heat-0112-abcd','f-heat-0112-abcd','2026-01-13T06:00:00Z','keeps little memory','autocorrelation','kwh','s3',NULL,NULL,'2026-01-12T00:00:00Z','2026-01-12T23:00:00Z','Bartlett (1946)',NULL,'fail','fail because of this',NULL,NULL,'rules-1',NULL,'0.1.0',1,24,0,-1.11701949584159632156e-01,-1.19928890210522332004e+00,-8.90591838757274212312e-01,-1.18719452785014,-8.08837239425599263675e-01,-1.5471446781284823313e+00,6.95303194458287809887e-01,6.67247560834327901879e-01,-2.35091131074681269907e-01,-5.38692895846636599088e-01,-6.20474899819940417522e-01);
INSERT INTO "records" VALUES('5f7528dd2253e822a289bc45c23eb819','91ea34c7acd839316c7419a4acda3709',4,'substation_heat','heat-0112-abcd','f-heat-0112-abcd','2026-01-13T06:00:00Z','keeps little memory','autocorrelation','kwh','s4',NULL,NULL,'2026-01-12T00:00:00Z','2026-01-12T23:00:00Z','Bartlett (1946)',NULL,'pass',NULL,NULL,NULL,'rules-1',NULL,'0.1.0',1,24,0,1.10464143249480589714e-01,7.45162287714634247182e-02,-4.54670785171722546813e-01,-5.79301596502673210586e-01,1.0608986233860786541e+00,8.593826880215982289e-01,-1.34421454728508193987e+00,1.4385225916561519277e+00,-1.26744648144370319897e+00,-4.85009454010719848193e-02,4.89842050185198218947e-01);
INSERT INTO "records" VALUES('4e495144dfc205e6cd5cf1901b959ae4','91ea34c7acd839316c7419a4acda3709',5,'substation_heat','heat-0112-abcd','f-heat-0112-abcd','2026-01-13T06:00:00Z','keeps little memory','autocorrelation','kwh','s5',NULL,NULL,'2026-01-12T00:00:00Z','2026-01-12T23:00:00Z','Bartlett (1946)',NULL,'undecided','undecided because of this',NULL,NULL,'rules-1',NULL,'0.1.0',1,24,0,6.37817742550619570796e-02,5.76689583670185301755e-01,-9.91646554996462370468e-01,-1.96195972804496687746e-01,-8.07534675331896489858e-01,1.19354025696581239612e-01,-4.57615761040218171906e-01,-6.75662251005652803037e-01,2.71264358821701523361e-01,1.13308986003307562984e-01,3.56887008160060748007e-01);
INSERT INTO "records" VALUES('93c9ae28fb11ec194b7330d69edf7ea0','86d8e32e7e8bcdbce0bee989a69793c9',0,'substation_heat','heat-0113-abcd','f-heat-0113-abcd','2026-01-13T06:00:00Z','keeps little memory','autocorrelation','kwh','s0',NULL,NULL,'2026-01-12T00:00:00Z','2026-01-12T23:00:00Z','Bartlett (1946)',NULL,'fail','fail because of this',NULL,NULL,'rules-1',NULL,'0.1.0',1,24,0,-0.0325217049455206,-6.41470394107221397739e-01,1.2301533574825742473e-03,2.0313861038960903671e-01,-1.53013576550539354137e+00,-1.22505582641769339424e+00,1.05414248997898557513e-01,-1.88782125350749313552e-01,-1.90122273980084410816e+00,1.56751086624225155485e-01,6.0143602597438484969e-02);
INSERT INTO "records" VALUES('1ac2aed761bd3b3c1fecc33efe16e8fa','86d8e32e7e8bcdbce0bee989a69793c9',1,'substation_heat','heat-0113-abcd','f-heat-0113-abcd','2026-01-13T06:00:00Z','keeps little memory','autocorrelation','kwh','s1',NULL,NULL,'2026-01-12T00:00:00Z','2026-01-12T23:00:00Z','Bartlett (1946)',NULL,'pass',NULL,NULL,NULL,'rules-1',NULL,'0.1.0',1,24,0,8.84389867383173933212e-01,2.00041654634242282995e+00,2.98745537508469882759e-01,-4.6330757653841514454e-01,-4.77753276033930640576e-01,0.0761402303770081,-9.30468044708204655712e-01,0.682910267195206,-1.28953773978497610031e+00,-1.86930944629954381985e-01,1.34021524555453352967e+00);
INSERT INTO "records" VALUES('c02839d0f6e2b1a016812cade84a01b1','86d8e32e7e8bcdbce0bee989a69793c9',2,'substation_heat','heat-0113-abcd','f-heat-0113-abcd','2026-01-13T06:00:00Z','keeps little memory','autocorrelation','kwh','s2',NULL,NULL,'2026-01-12T00:00:00Z','2026-01-12T23:00:00Z','Bartlett (1946)',NULL,'pass',NULL,NULL,NULL,'rules-1',NULL,'0.1.0',1,24,0,-0.583600432743302,7.62259712084711771318e-01,-2.74137855362217575105e-01,1.27268411225830824218e-01,-9.78519078056639513008e-01,1.35882342174153758485e+00,-2.92518224632734892554e-02,-6.65173201494155680313e-02,-1.84173503779173231009e+00,-2.51675971082051308513e+00,-4.92206518551329630373e-01);
INSERT INTO "records" VALUES('5df31fc67abc88554a3f5b810148a607','86d8e32e7e8bcdbce0bee989a69793c9',3,'substation_heat','heat-0113-abcd','f-heat-0113-abcd','2026-01-13T06:00:00Z','keeps little memory','autocorrelation','kwh','s3',NULL,NULL,'2026-01-12T00:00:00Z','2026-01-12T23:00:00Z','Bartlett (1946)',NULL,'fail','fail because of this',NULL,NULL,'rules-1',NULL,'0.1.0',1,24,0,-1.11701949584159632156e-01,-1.19928890210522332004e+00,-8.90591838757274212312e-01,-1.18719452785014,-8.08837239425599263675e-01,-1.5471446781284823313e+00,6.95303194458287809887e-01,6.67247560834327901879e-01,-2.35091131074681269907e-01,-5.38692895846636599088e-01,-6.20474899819940417522e-01);
INSERT INTO "records" VALUES('f8921a334349fe30f7c5b2a69694998b','86d8e32e7e8bcdbce0bee989a69793c9',4,'substation_heat','heat-0113-abcd','f-heat-0113-abcd','2026-01-13T06:00:00Z','keeps little memory','autocorrelation','kwh','s4',NULL,NULL,'2026-01-12T00:00:00Z','2026-01-12T23:00:00Z','Bartlett (1946)',NULL,'pass',NULL,NULL,NULL,'rules-1',NULL,'0.1.0',1,24,0,1.10464143249480589714e-01,7.45162287714634247182e-02,-4.54670785171722546813e-01,-5.79301596502673210586e-01,1.0608986233860786541e+00,8.593826880215982289e-01,-1.34421454728508193987e+00,1.4385225916561519277e+00,-1.26744648144370319897e+00,-4.85009454010719848193e-02,4.89842050185198218947e-01);
INSERT INTO "records" VALUES('85161c1544972768e653afd0d3d3d399','86d8e32e7e8bcdbce0bee989a69793c9',5,'substation_heat','heat-0113-abcd','f-heat-0113-abcd','2026-01-13T06:00:00Z','keeps little memory','autocorrelation','kwh','s5',NULL,NULL,'2026-01-12T00:00:00Z','2026-01-12T23:00:00Z','Bartlett (1946)',NULL,'undecided','undecided because of this',NULL,NULL,'rules-1',NULL,'0.1.0',1,24,0,6.37817742550619570796e-02,5.76689583670185301755e-01,-9.91646554996462370468e-01,-1.96195972804496687746e-01,-8.07534675331896489858e-01,1.19354025696581239612e-01,-4.57615761040218171906e-01,-6.75662251005652803037e-01,2.71264358821701523361e-01,1.13308986003307562984e-01,3.56887008160060748007e-01);
CREATE TABLE settlements (
	settlement_id VARCHAR(64) NOT NULL, 
	batch_id VARCHAR(255) NOT NULL, 
	feed TEXT NOT NULL, 
	what TEXT NOT NULL, 
	settled_by TEXT NOT NULL, 
	because TEXT NOT NULL, 
	settled_at TEXT NOT NULL, 
	relearn_from TEXT, 
	PRIMARY KEY (settlement_id), 
	FOREIGN KEY(batch_id) REFERENCES batches (batch_id)
);
INSERT INTO "settlements" VALUES('639185013bcfb6693aec89c600e08674','heat-0112-abcd','substation_heat','released','Ana','pump test','2026-01-14T08:00:00Z',NULL);
CREATE TABLE sketches (
	judgement_id VARCHAR(64) NOT NULL, 
	sketches TEXT NOT NULL, 
	PRIMARY KEY (judgement_id), 
	FOREIGN KEY(judgement_id) REFERENCES judgements (judgement_id)
);
CREATE TABLE standings (
	judgement_id VARCHAR(64) NOT NULL, 
	place BIGINT NOT NULL, 
	batch_id VARCHAR(255) NOT NULL, 
	feed TEXT NOT NULL, 
	rule TEXT NOT NULL, 
	at TEXT NOT NULL, 
	received_at TEXT NOT NULL, 
	stored_at TEXT NOT NULL, 
	state TEXT NOT NULL, 
	passed BIGINT NOT NULL, 
	failed BIGINT NOT NULL, 
	undecided BIGINT NOT NULL, 
	series BIGINT NOT NULL, 
	action TEXT, 
	record_id TEXT, 
	p_value DOUBLE, 
	beyond DOUBLE, 
	episode_id VARCHAR(64), 
	PRIMARY KEY (judgement_id, place), 
	FOREIGN KEY(judgement_id) REFERENCES judgements (judgement_id)
);
INSERT INTO "standings" VALUES('91ea34c7acd839316c7419a4acda3709',0,'heat-0112-abcd','substation_heat','keeps little memory','2026-01-12T23:00:00Z','2026-12-01T13:39:17.695157Z','2026-12-01T13:39:17.695157Z','fail',3,2,1,2,'note','eaca7585b707eac78a81ddfe76289e0f',-1.88782125350749313552e-01,3.77589843105435818415e+00,'a3ba8088d6df937603de3bb59514c62d');
INSERT INTO "standings" VALUES('86d8e32e7e8bcdbce0bee989a69793c9',0,'heat-0113-abcd','substation_heat','keeps little memory','2026-01-13T23:00:00Z','2026-12-01T13:39:17.709422Z','2026-12-01T13:39:17.709422Z','fail',3,2,1,2,'note','93c9ae28fb11ec194b7330d69edf7ea0',-1.88782125350749313552e-01,3.77589843105435818415e+00,'a3ba8088d6df937603de3bb59514c62d');
CREATE TABLE standings_due (
	judgement_id VARCHAR(64) NOT NULL, 
	PRIMARY KEY (judgement_id)
);
CREATE INDEX ix_judgements_batch_id ON judgements (batch_id);
CREATE INDEX records_of_judgement ON records (judgement_id, place);
CREATE INDEX settlements_of_batch ON settlements (batch_id);
CREATE INDEX settlements_of_feed ON settlements (feed);
CREATE INDEX baselines_of_feed ON baselines (feed);
CREATE INDEX standings_of_episode ON standings (episode_id);
CREATE INDEX standings_of_batch ON standings (batch_id);
CREATE INDEX messages_by_state ON messages (state);
CREATE INDEX standings_of_feed ON standings (feed, at);
CREATE INDEX episodes_of_feed ON episodes (feed);
CREATE INDEX records_that_failed ON records (judgement_id) WHERE outcome = 'fail';
CREATE INDEX records_of_series ON records (series);
COMMIT;
