import assignable.ApiClient;
import assignable.ApiException;
import assignable.api.CapabilityApi;
import assignable.api.ChartsApi;
import assignable.model.Characteristic;
import assignable.model.MeasurementData;
import assignable.model.MeasurementsAnswer;
import assignable.model.MeasurementsRequest;
import assignable.model.MeasurementsRequestQuery;
import assignable.model.Problem;
import assignable.model.SignalAnswer;
import assignable.model.SpecificationRequest;
import assignable.model.SubgroupData;
import assignable.model.XbarRCarryDocument;
import assignable.model.XbarRFit;
import assignable.model.XbarRFitQuery;
import assignable.model.XbarRJudge;
import assignable.model.XbarRLimitsAnswer;
import assignable.model.XbarRLimitsDocument;
import assignable.model.XbarRSignalsAnswer;
import com.fasterxml.jackson.databind.JsonNode;
import com.fasterxml.jackson.databind.ObjectMapper;
import java.io.File;
import java.util.ArrayList;
import java.util.Arrays;
import java.util.LinkedHashMap;
import java.util.List;
import java.util.Map;

/**
 * What an MES written in Java does with the generated classes: freeze limits, watch, assess, meet a problem.
 * {@code java Main URL MEASUREMENTS} prints what was read, and the answers as the typed objects hold them.
 */
public final class Main {
    /** Of an operation that also takes a table as CSV: what goes into its query is in the body of JSON. */
    private static final XbarRFitQuery NO_OPTIONS_BESIDE_JSON = new XbarRFitQuery();

    public static void main(String[] arguments) throws Exception {
        ApiClient client = new ApiClient();
        client.updateBaseUri(arguments[0]);
        ObjectMapper mapper = client.getObjectMapper();
        JsonNode measured = mapper.readTree(new File(arguments[1]));
        ChartsApi charts = new ChartsApi(client);

        Characteristic wall = new Characteristic().name("wall thickness").unit("mm");
        SubgroupData baseline = mapper.convertValue(measured.get("baseline"), SubgroupData.class);
        XbarRLimitsAnswer fitted = charts.fitXbarRLimits(
            new XbarRFit().characteristic(wall).data(baseline), NO_OPTIONS_BESIDE_JSON);
        // Kept beside the characteristic as JSON, and taken from there for every judgement.
        String kept = mapper.writeValueAsString(fitted.getLimits());

        List<XbarRSignalsAnswer> judged = new ArrayList<>();
        XbarRCarryDocument carry = null;
        for (String part : List.of("first", "second")) {
            XbarRSignalsAnswer answer = charts.judgeXbarR(new XbarRJudge()
                .limits(mapper.readValue(kept, XbarRLimitsDocument.class))
                .data(mapper.convertValue(measured.get(part), SubgroupData.class))
                .carry(carry));
            carry = mapper.convertValue(answer.getCarry(), XbarRCarryDocument.class);
            judged.add(answer);
        }

        MeasurementsAnswer capability = new CapabilityApi(client).assessMeasurements(new MeasurementsRequest()
            .characteristic(wall)
            .data(new MeasurementData().values(baseline.getValues()))
            .specification(mapper.convertValue(measured.get("specification"), SpecificationRequest.class)), new MeasurementsRequestQuery());

        Problem problem;
        try {
            charts.fitXbarRLimits(new XbarRFit().data(baseline).sigmaMultiple(-3.0), NO_OPTIONS_BESIDE_JSON);
            throw new IllegalStateException("a problem was expected");
        } catch (ApiException refused) {
            problem = mapper.readValue(refused.getResponseBody(), Problem.class);
        }

        Double centre = fitted.getLimits().getCentre();
        Long pointsBehind = judged.get(1).getCarry().getPoints();
        List<List<String>> signals = new ArrayList<>();
        for (XbarRSignalsAnswer answer : judged) {
            for (SignalAnswer one : answer.getSignals()) {
                String side = one.getSide() == null ? null : one.getSide().getValue();
                signals.add(Arrays.asList(one.getRule(), one.getPanel(), one.getId(), side, one.getSentence()));
            }
        }
        Map<String, Object> read = new LinkedHashMap<>();
        read.put("centre", centre);
        read.put("mean_upper", fitted.getLimits().getPanels().getMean().getUpper());
        read.put("range_lower", fitted.getLimits().getPanels().getRange().getLower());
        read.put("verdicts", judged.stream().map(answer -> answer.getVerdict().getValue()).toList());
        read.put("signals", signals);
        read.put("points_behind", pointsBehind);
        read.put("cpk", capability.getCapability().getCpk().getValue());
        read.put("pointer", problem.getErrors().get(0).getPointer());
        read.put("code", problem.getErrors().get(0).getCode());

        // The generated mapper leaves out what is null in a map; in the typed objects it keeps what is required.
        Map<String, Object> report = new LinkedHashMap<>();
        report.put("read", read);
        report.put("fitted", mapper.valueToTree(fitted));
        report.put("judged", mapper.valueToTree(judged));
        report.put("capability", mapper.valueToTree(capability));
        report.put("problem", mapper.valueToTree(problem));
        System.out.println(new ObjectMapper().writeValueAsString(report));
    }
}
